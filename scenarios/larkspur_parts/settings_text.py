"""The text of `scenario.toml`."""

from __future__ import annotations

from .calendar_week import TIME_ZONE
from .grid import BASE_MVA

POWER_BALANCE_PENALTY = 2500.0
TRANSMISSION_PENALTY = 1200.0

SCENARIO_TOML = f"""\
# The Larkspur Divide is invented: no operator, no plant and no price in this folder is real.
# Written by scenarios/make_larkspur.py; change that and run it again.

[scenario]
name = "Larkspur Divide, 26 October to 1 November 2026"
currency = "USD"
time_zone = "{TIME_ZONE}"
base_mva = {BASE_MVA}
interval_minutes = 60

[reference]
kind = "load"                   # as the operator publishes its components

[dc]
susceptance = "reactance"
taps = true

[penalties]
power_balance = {POWER_BALANCE_PENALTY}
transmission = {TRANSMISSION_PENALTY}

[posted]
congestion_sign = -1            # this operator publishes lmp = energy - congestion + loss

[settlement]
materiality = 250.0
deadline_days = 60
counted = "calendar"
from = "published"
label = "Larkspur tariff (invented), part 7"
"""
