"""The faults that can be planted in the posted prices, and where each one is.

Every fault changes what the operator *publishes*; the inputs of the week stay as they are. Which ones are planted is
chosen by name on the command line of `make_larkspur.py`.
"""

from __future__ import annotations

from dataclasses import dataclass

from .calendar_week import position, span

FAULTS: dict[str, str] = {
    "stale-factors": "delivery factors of some nodes frozen at one hour of another day",
    "reversed-interface": "congestion of one interface published in the wrong direction",
    "renamed-node": "one node published under a new name from the middle of the week",
    "revised-day": "one day published twice, the first time without a planned outage",
    "wrong-sign": "congestion published against the declared sign convention",
    "rounding": "everything published in whole cents",
}
"""Name of each fault and what it is."""

STALE_NODES: tuple[str, ...] = (
    "Skylark 138",
    "Gannet 138",
    "Otterwick 138",
    "Sablegate 345",
    "Pikestone 69",
    "Limpet 69",
    "Sandpiper 69",
)
STALE_HOURS = span(("Thu", 0), ("Fri", 23))
STALE_SOURCE = position("Tue", 13)
"""The frozen factors are those of this hour."""

REVERSED_INTERFACE = "Mesa export"
REVERSED_HOURS = span(("Tue", 10), ("Tue", 15))

RENAMED_NODE = "Juniper 138"
NEW_NAME = "Juniper East 138"
RENAMED_HOURS = range(position("Thu", 12), position("Sun", 23) + 1)

REVISED_HOURS = span(("Wed", 0), ("Wed", 23))
FORGOTTEN_OUTAGE = "Ashlatch-Copperfen B"
"""Version 1 of the revised day was cleared as if this branch were in service."""

WRONG_SIGN_HOURS = span(("Sun", 10), ("Sun", 13))


@dataclass(frozen=True)
class Planted:
    """The faults to plant, by name."""

    names: frozenset[str]

    def __contains__(self, name: str) -> bool:
        return name in self.names

    @staticmethod
    def parse(text: str) -> Planted:
        """Return the faults of a command-line value: ``all``, ``none`` or names with commas."""
        if text == "all":
            return Planted(frozenset(FAULTS))
        names = frozenset(() if text == "none" else text.split(","))
        if unknown := sorted(names - FAULTS.keys()):
            raise SystemExit(f"no fault {', '.join(unknown)}; choose from {', '.join(FAULTS)}")
        return Planted(names)
