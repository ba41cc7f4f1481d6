"""Every tolerance of the project, in one place, each with its reason.

The values in force are written into the run manifest, so that a figure can be traced to them.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass


@dataclass(frozen=True, kw_only=True)
class Tolerances:
    """Numerical tolerances and thresholds; all of them are settings of a run."""

    # --- solving -----------------------------------------------------------------------------------
    objective_scale: float = 1e-3
    """Dollars are multiplied by this before an interior-point solver sees them [-]. Costs of 1e4 to 1e6 $/h
    would otherwise dominate its stopping test and leave price errors of several cents."""
    conic_feasibility: float = 1e-9
    """Stopping tolerance of the cone solver [-]; its default 1e-8 left a price error of 0.036 $/MWh on
    300 buses."""
    quadratic_gap: float = 1e-11
    """Relative gap at which the same solver may stop on a program without cones [-]. A gap of 1e-9 of the cost can sit
    on one unit and put its marginal cost a cent off its price (10,192 buses); a program without cones reaches
    this with one more iteration."""
    nonlinear_tolerance: float = 1e-8
    """Stopping tolerance of the nonlinear solver [-], in scaled units."""

    nonlinear_bound_relaxation: float = 1e-10
    """How far the nonlinear solver may relax bounds before it starts [-]. Its default 1e-8, times penalties of
    3000 $/MWh on a hundred slacks, put 0.3 $/h of unreal cost and complementarity into a 48-bus hour."""

    # --- certificate -------------------------------------------------------------------------------
    price_residual: float = 1e-3
    """Largest accepted difference between the solver's multiplier and the price rebuilt from its components
    [$/MWh]. A hundredth of a cent matters to nobody; a dropped term shows as cents or dollars."""
    primal_residual_mw: float = 1e-3
    """Largest accepted violation of a balance or limit [MW]."""
    dual_residual: float = 1e-2
    """Largest accepted violation of stationarity [$/MWh]; one cent is the rounding of posted prices."""
    duality_gap_relative: float = 1e-6
    """Largest accepted duality gap relative to the money that changes hands [-]."""
    duality_gap_floor: float = 0.01
    """A duality gap up to this is accepted whatever changes hands [$/h]: 1e-8 in the scaled units of the nonlinear
    solver, on a hundred limits, is a tenth of a cent an hour, which on 100 MW moves no price by a thousandth of one."""

    restated_cost: float = 1e-6
    """Relative difference in cost up to which an independent restatement agrees [-]: both solvers stop at 1e-8 or
    tighter; 2e-9 was the largest seen."""

    # --- what counts as binding --------------------------------------------------------------------
    shadow_price: float = 1e-5
    """Shadow prices below this are interior-point dust [$/MWh]."""
    active_slack_mw: float = 1e-3
    """A limit with less slack than this counts as active [MW]: interior-point slack of active limits was at
    most 3e-7 MW, of weakly active ones up to 3e-3 MW."""
    active_slack_relative: float = 1e-6
    """The same, relative to the limit [-]; the larger of both is used."""
    penalty_match: float = 1e-4
    """A shadow price within this relative distance of its penalty stands at the penalty [-]."""

    # --- security --------------------------------------------------------------------------------------
    security_excess: float = 1e-5
    """Post-outage excess that still passes the screening [pu], 1 kW on a 100 MVA base: above the interior-point
    slack of a limit that was enforced, below anything that moves a price."""
    security_rounds: int = 30
    """Screening rounds before the loop gives up and says so [-]."""
    pairs_per_round: int = 200
    """Most pairs added in one round [-]: more makes the solve dearer than another round."""

    # --- uniqueness --------------------------------------------------------------------------------
    rank_ratio: float = 1e-5
    """Smallest over largest singular value of the row-normalised active gradients below which prices may not
    be unique [-]: regular cases measured at 4e-5 and above, degenerate ones at 5e-7 and below."""
    interval_width: float = 0.05
    """A price interval wider than this is reported as not unique [$/MWh]."""
    stationarity_floor: float = 1e-4
    """Stationarity is imposed no tighter than this in the interval search [$/MWh]."""

    # --- trust in relaxed prices -------------------------------------------------------------------
    exact_gap: float = 1e-5
    """Cost gap to the AC local optimum up to which a relaxation is exact [-] (0.001 %)."""
    exact_loop_deg: float = 0.01
    """Largest angle by which a branch of an exact relaxation misses the angles fitted to all of them [deg]."""
    exact_mismatch_mw: float = 0.01
    """Largest AC mismatch of an exact relaxation [MW]."""
    exact_overload: float = 1e-4
    """Relative overload up to which a limit holds in an exact relaxation [-]: limits bind there, and the mismatch
    that is accepted moves flows by that much."""
    exact_voltage_pu: float = 1e-5
    """The same for the voltage band [pu]."""
    close_gap: float = 2.5e-3
    """Cost gap up to which a relaxed price is close [-] (0.25 %)."""
    close_overload: float = 0.01
    """Largest relative overload of a close relaxation [-]."""
    close_angle_deg: float = 0.1
    """Largest violation of an angle limit of a close relaxation [deg]."""
    fictitious_loss_mw: float = 0.01
    """Loss beyond the physical one that a relaxed loss model may burn unnoticed [MW]."""

    # --- frozen delivery factors -------------------------------------------------------------------
    proximal_at_base: float = 1e-4
    """Weight of the proximal term when factors are frozen at the dispatch itself [$/MWh per MW]: the
    linearised dispatch is not unique there."""
    proximal_away: float = 1e-6
    """The same, away from the base dispatch [$/MWh per MW]."""

    # --- another reference -------------------------------------------------------------------------
    reference_energy: float = 1e-6
    """Weighted energy plus loss closer to zero than this cannot be divided by [$/MWh]: it is the noise of a
    solver's prices, and delivery factors formed with it would be noise. Rounded data raise it further."""

    # --- posted prices -----------------------------------------------------------------------------
    explained_congestion: float = 0.05
    """Congestion that constraints may leave over and still account for it [$/MWh]; a few cents of rounding."""
    posted_rounding: float = 0.005
    """Half a cent: the rounding of posted prices and components [$/MWh]."""
    smallest_energy_price: float = 0.5
    """Energy prices nearer to zero than this do not carry a delivery factor [$/MWh]: half a cent of rounding in
    the loss component would be more than one percent of the factor."""

    # --- drivers -----------------------------------------------------------------------------------
    smallest_driver: float = 1e-9
    """Drivers smaller than this are left out of the driver table [$/MWh]; a thousand of them would still add
    up to 1e-6."""

    def as_dict(self) -> dict[str, float]:
        """Return the values by name, for the manifest and the report."""
        return asdict(self)


DEFAULT_TOLERANCES = Tolerances()
