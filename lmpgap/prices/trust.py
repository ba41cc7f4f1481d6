"""Whether the price of a relaxation may be used.

A relaxed dispatch can be tight in every cone and still be no operating point of the network, because the angles
around its loops do not close. Neither cone slack nor loop angle nor mismatch tells right prices from wrong ones
alone. What does: the AC power flow at the relaxed dispatch against every limit of the model, together with the
gap between the relaxed cost and the cost of the AC dispatch.

For the relaxation itself: "Branch Flow Model: Relaxations and Convexification", IEEE Trans. Power Systems 28(3),
2013, where the closing of angles around loops is what a meshed network asks of an exact relaxation.
"""

from __future__ import annotations

from lmpgap.dispatch.ac_check import AcCheck
from lmpgap.tolerances import Tolerances

EXACT = "exact"
"""The relaxed dispatch is an AC dispatch: its price is the AC price."""
CLOSE = "close"
"""Not an AC dispatch, but near enough that its prices were off by a few percent of the mean price at most."""
NOT_A_PRICE = "not a price"
"""The relaxed dispatch is no state that the network can be in; its price says nothing."""
NOT_VERIFIED = "not verified"
"""Nothing speaks against the price, but there is no AC dispatch to compare with."""


def relaxation_verdict(
    *,
    check: AcCheck | None,
    cost_gap: float | None,
    loop_angle_deg: float,
    tolerances: Tolerances,
) -> tuple[str, tuple[str, ...]]:
    """Return the verdict on a relaxed price, and the reasons in words.

    Parameters
    ----------
    check
        AC power flow at the relaxed dispatch, ``None`` when there was none.
    cost_gap
        (AC cost - relaxed cost) / AC cost [-]; ``None`` without an AC dispatch.
    loop_angle_deg
        Largest angle that the loops leave open at a branch [deg].
    tolerances
        ``exact_*`` and ``close_*``.

    Returns
    -------
    verdict : str
        `EXACT`, `CLOSE`, `NOT_A_PRICE` or `NOT_VERIFIED`.
    reasons : tuple of str
        What kept it from a better verdict; empty for `EXACT`.
    """
    reasons = []
    close = True
    exact = True
    if check is None:
        reasons.append("no AC power flow was run at this dispatch")
        exact = close = False
    elif not check.converged:
        reasons.append(f"the AC power flow at this dispatch has no solution: {check.reason}")
        exact = close = False
    else:
        if check.overload > tolerances.close_overload:
            close = False
            reasons.append(f"in AC {check.overloaded} is overloaded by {100 * check.overload:.1f} %")
        if check.angle_deg > tolerances.close_angle_deg:
            close = False
            reasons.append(f"in AC an angle limit is exceeded by {check.angle_deg:.2f} deg")
        beyond = _beyond_exact(check, tolerances)
        if beyond:
            exact = False
            reasons += [reason for reason in beyond if close]
        if not check.mismatch_mw <= tolerances.exact_mismatch_mw:
            exact = False
            reasons.append(f"the dispatch misses the AC balance by {check.mismatch_mw:.3g} MW")
    if not loop_angle_deg <= tolerances.exact_loop_deg:
        exact = False
        reasons.append(f"angles do not close around loops: {loop_angle_deg:.3g} deg are left at a branch")
    if cost_gap is None:
        contradicted = check is not None and check.converged and not close
        reasons.append("there is no AC dispatch to compare the cost with")
        return NOT_A_PRICE if contradicted else NOT_VERIFIED, tuple(reasons)
    # A relaxed cost above the AC cost is an error of one of the two solvers and no better than one below.
    if not abs(cost_gap) <= tolerances.close_gap:
        close = False
    if not abs(cost_gap) <= tolerances.exact_gap:
        exact = False
        reasons.insert(0, f"the AC dispatch costs {100 * cost_gap:.3g} % more")
    if exact:
        return EXACT, ()
    return CLOSE if close else NOT_A_PRICE, tuple(reasons)


def _beyond_exact(check: AcCheck, tolerances: Tolerances) -> list[str]:
    """Return one sentence per kind of limit that does not hold within the resolution of an exact relaxation."""
    power = tolerances.exact_mismatch_mw
    figures = [
        (
            check.overload,
            tolerances.exact_overload,
            f"{check.overloaded} is overloaded by {100 * check.overload:.2g} %",
        ),
        (check.angle_deg, tolerances.exact_loop_deg, f"an angle limit is exceeded by {check.angle_deg:.2g} deg"),
        (check.voltage_pu, tolerances.exact_voltage_pu, f"a voltage leaves its band by {check.voltage_pu:.2g} pu"),
        (check.reactive_mvar, power, f"a reactive limit is exceeded by {check.reactive_mvar:.3g} Mvar"),
        (check.active_mw, power, f"an output leaves its range by {check.active_mw:.3g} MW"),
    ]
    return [f"in AC {sentence}" for value, accepted, sentence in figures if not value <= accepted]
