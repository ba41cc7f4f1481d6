"""What a reader must know to use the figures: conventions of this run and cautions of the trade."""

from __future__ import annotations

from lmpgap.report.view.hours import REPEATED_MARK
from lmpgap.scenario.settings import ScenarioSettings

CAUTIONS: tuple[str, ...] = (
    "A relaxed price (soc) may be used only where its verdict is exact or close; elsewhere it solves a grid that "
    "does not exist, and tight cones alone do not show it.",
    "An AC price belongs to a local optimum. The solver shows that no small change is cheaper, not that nothing is.",
    "The lossless dispatch (dc) has no loss component; its whole price stands against the sum of the others.",
    "Components mean something only on one reference. The tables here use the reference named under conventions.",
    "Where the solution admits more than one price, a difference inside the interval is not a divergence.",
    "Marginal losses are about twice average losses: charging them collects more than the losses cost, by design.",
    "Financial rights commonly settle on congestion components only and do not hedge losses; tariffs vary.",
    "A re-solved dispatch rests on the offers and limits in the inputs; the operator may have seen others.",
)


def conventions(settings: ScenarioSettings) -> tuple[tuple[str, str], ...]:
    """Return the conventions behind the figures as pairs of subject and statement."""
    reference = {
        "load": "load-weighted, interval by interval",
        "bus": f"bus {settings.reference.bus}",
        "weights": "fixed weights of the table reference_weights",
    }[settings.reference.kind]
    susceptance = "1/x" if settings.dc.susceptance == "reactance" else "x/(r\N{SUPERSCRIPT TWO}+x\N{SUPERSCRIPT TWO})"
    taps = "tap ratios and phase shifts applied" if settings.dc.taps else "tap ratios and phase shifts left out"
    penalties = settings.penalties
    soft = [
        f"{name} {value:,.0f} {settings.currency}/MWh"
        for name, value in (("power balance", penalties.power_balance), ("transmission", penalties.transmission))
        if value is not None
    ]
    return (
        (
            "Hours",
            f"Hour ending, {settings.time_zone}; the later of two equal clock hours is marked {REPEATED_MARK}.",
        ),
        ("Interval", f"{settings.interval_minutes} minutes."),
        ("Prices", f"{settings.currency}/MWh; a difference is the second-named price less the first-named."),
        ("Reference of the components", f"{reference}."),
        ("Linear formulation", f"Susceptance {susceptance}, {taps}."),
        ("Soft limits", f"{'; '.join(soft)}." if soft else "None: every limit is hard."),
        ("Shadow price", "Fall of cost per unit of relaxed limit and hour; never negative."),
        ("Delivery factor", "1 less the marginal loss factor, on the reference of the components."),
        ("Positions", "Withdrawal is positive and pays; injection is negative and is paid."),
        (
            "Formulations",
            "dc: lossless linear; dc-loss: linear with quadratic losses; soc: branch-flow cone relaxation; "
            "ac: full equations, local optimum.",
        ),
    )
