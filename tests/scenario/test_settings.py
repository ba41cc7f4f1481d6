# ruff: noqa: E501  (one case per line reads best)
"""`scenario.toml`: what it may say, and what is told when it says something else."""

from __future__ import annotations

from datetime import date
from pathlib import Path

import pytest

from lmpgap.errors import ScenarioError
from lmpgap.scenario.faults import FaultLog
from lmpgap.scenario.settings import (
    DcConvention,
    Penalties,
    PostedFormat,
    Reference,
    ScenarioSettings,
    Settlement,
)
from lmpgap.scenario.settings_file import SECTIONS, read_settings, settings_as_markdown
from tests.scenario.folder import SETTINGS, read, write

FULL = """\
[scenario]
name = "Kestrel Basin, week 11"
currency = "EUR"
time_zone = "Europe/Berlin"
base_mva = 50
interval_minutes = 15
[reference]
kind = "bus"
bus = "North"
[dc]
susceptance = "impedance"
taps = false
[penalties]
power_balance = 3000
transmission = 1500.5
[posted]
congestion_sign = -1
shadow_price_sign = -1
shape = "wide"
clock = "hour_ending"
local = true
[posted.columns]
lmp = "Total price"
component = "Part"
[settlement]
materiality = 250.0
deadline_days = 60
counted = "business"
from = "published"
holidays = [2026-07-03, "2026-05-25"]
label = "Part 7"
"""


def read_text(text: str) -> tuple[ScenarioSettings, list[str]]:
    log = FaultLog()
    settings = read_settings(text, log)
    return settings, [str(fault) for fault in log.faults]


def test_every_key() -> None:
    settings, found = read_text(FULL)
    assert found == []
    assert settings == ScenarioSettings(
        name="Kestrel Basin, week 11",
        currency="EUR",
        time_zone="Europe/Berlin",
        base_mva=50.0,
        interval_minutes=15,
        reference=Reference(kind="bus", bus="North"),
        dc=DcConvention(susceptance="impedance", taps=False),
        penalties=Penalties(power_balance=3000.0, transmission=1500.5),
        posted=PostedFormat(
            columns={"lmp": "Total price", "component": "Part"},
            congestion_sign=-1,
            shadow_price_sign=-1,
            shape="wide",
            clock="hour_ending",
            local=True,
        ),
        settlement=Settlement(
            materiality=250.0,
            deadline_days=60,
            counted="business",
            counted_from="published",
            holidays=(date(2026, 5, 25), date(2026, 7, 3)),
            label="Part 7",
        ),
    )


def test_a_name_is_enough() -> None:
    settings, found = read_text('[scenario]\nname = "x"\n')
    assert found == []
    assert settings == ScenarioSettings(name="x")


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        ("[dc]\ntap = true", "scenario.toml, line 8: there is no key 'tap' in [dc]; did you mean 'taps'?"),
        ("[dcc]\ntaps = true", "scenario.toml, line 7: there is no section [dcc]; did you mean 'dc'?"),
        ("[solver]\nname = 1", "scenario.toml, line 7: there is no section [solver]; allowed: [scenario], [reference]"),
        ("materialty = 3", "scenario.toml, line 7: there is no key 'materialty' in [scenario]; allowed: name"),
        ("materiality = 3", "scenario.toml, line 7: there is no key 'materiality' in [scenario]; it belongs in [settlement]"),
        ("[[dc]]\ntaps = true", "scenario.toml, line 7, column dc: is a section, not a value"),
        ("[dc]\ntaps = 1", "scenario.toml, line 8, column [dc] taps: is not what is expected (found '1'); allowed: true or false"),
        ("[dc]\nsusceptance = 'x'", "scenario.toml, line 8, column [dc] susceptance: is not what is expected (found 'x'); allowed: \"reactance\" or \"impedance\""),
        ("[penalties]\ntransmission = -5", "scenario.toml, line 8, column [penalties] transmission: is not what is expected (found '-5'); allowed: a number above 0"),
        ("[penalties]\ntransmission = inf", "scenario.toml, line 8, column [penalties] transmission: is not what is expected (found 'inf')"),
        ("[penalties]\ntransmission = nan", "scenario.toml, line 8, column [penalties] transmission: is not what is expected (found 'nan')"),
        ("[penalties]\ntransmission = true", "scenario.toml, line 8, column [penalties] transmission: is not what is expected (found 'True')"),
        ("[penalties]\ntransmission = '5'", "scenario.toml, line 8, column [penalties] transmission: is not what is expected (found '5')"),
        ("[posted]\ncongestion_sign = 2", "scenario.toml, line 8, column [posted] congestion_sign: is not what is expected (found '2'); allowed: 1 or -1"),
        ("[posted.columns]\nLMP = 'lmp'", "scenario.toml, line 7, column [posted] columns: is not what is expected (found \"{'LMP': 'lmp'}\"); allowed: on the left a column of `posted` or `posted_constraints`, not 'LMP'; did you mean 'lmp'?"),
        ("[posted.columns]\nlmp = 'a'\nnode = 'a'", "scenario.toml, line 7, column [posted] columns: is not what is expected (found \"{'lmp': 'a', 'node': 'a'}\"); allowed: each own column once, not 'a' for both lmp and node"),
        ("[settlement]\ndeadline_days = 1.5", "scenario.toml, line 8, column [settlement] deadline_days: is not what is expected (found '1.5'); allowed: a whole number from 0 to 3650"),
        ("[settlement]\nholidays = ['5/25']", "scenario.toml, line 8, column [settlement] holidays: is not what is expected (found \"['5/25']\"); allowed: dates such as 2026-05-25, not '5/25'"),
        ("[settlement]\nfrom = 'today'", "scenario.toml, line 8, column [settlement] from: is not what is expected (found 'today'); allowed: \"interval\" or \"published\""),
        ("[dc\ntaps = true", "scenario.toml, line 7: is not valid TOML"),
        ("[dc]\ntaps = true\ntaps = true", "scenario.toml, line 9: is not valid TOML: Cannot overwrite a value"),
        ("[reference]\nkind = 'bus'\nbus = 'Noth'", "scenario.toml, column [reference] bus: is not in buses; did you mean 'North'? (found 'Noth')"),
        ("[reference]\nkind = 'weights'", 'scenario.toml, column [reference] kind: is "weights", but there is no table reference_weights'),
    ],
)  # fmt: skip
def test_message(tmp_path: Path, lines: str, message: str) -> None:
    with pytest.raises(ScenarioError) as caught:
        read(tmp_path, {"scenario.toml": SETTINGS + lines + "\n"})
    found = [str(fault) for fault in caught.value.faults]
    assert any(fault.startswith(message) for fault in found), found


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('name = "Three buses"\n', "", "scenario.toml, column [scenario] name: the key is missing"),
        ('"Three buses"', '" "', "scenario.toml, line 2, column [scenario] name: is not what is expected"),
        ("America/Boise", "America/Boisee", "scenario.toml, line 4, column [scenario] time_zone: is not what is expected (found 'America/Boisee'); allowed: a time zone by its IANA name, e.g. America/Boise; did you mean 'America/Boise'?"),
        ("America/Boise", "../../etc/passwd", "scenario.toml, line 4, column [scenario] time_zone: is not what is expected"),
        ("America/Boise", "America", "scenario.toml, line 4, column [scenario] time_zone: is not what is expected"),
        ("base_mva = 100.0", "base_mva = 0", "scenario.toml, line 5, column [scenario] base_mva: is not what is expected (found '0'); allowed: a number above 0"),
        ("minutes = 60", "minutes = 0", "scenario.toml, line 6, column [scenario] interval_minutes: is not what is expected (found '0'); allowed: a whole number from 1 to 1440"),
        ("[scenario]", "name = 3\n[scenario]", "scenario.toml, line 1: key 'name' stands outside a section"),
    ],
)  # fmt: skip
def test_message_in_the_scenario_section(tmp_path: Path, old: str, new: str, message: str) -> None:
    with pytest.raises(ScenarioError) as caught:
        read(tmp_path, {"scenario.toml": SETTINGS.replace(old, new)})
    found = [str(fault) for fault in caught.value.faults]
    assert any(fault.startswith(message) for fault in found), found


@pytest.mark.parametrize(
    "content",
    [b"", b"\xff\xfe\x00", b"[" * 100_000, b"a = " + b"[" * 5_000, b"x" * 2_000_000, b"[scenario]\nname = \"\xe9\"\n"],
)  # fmt: skip
def test_no_toml_at_all(tmp_path: Path, content: bytes) -> None:
    with pytest.raises(ScenarioError) as caught:
        read(tmp_path, {"scenario.toml": content})
    assert len(caught.value.faults) == 1
    assert caught.value.faults[0].table == "scenario.toml"


def test_byte_order_mark(tmp_path: Path) -> None:
    assert read(tmp_path, {"scenario.toml": b"\xef\xbb\xbf" + SETTINGS.encode()}).settings.name == "Three buses"


def test_page_names_every_key() -> None:
    page = settings_as_markdown()
    for section, keys in SECTIONS.items():
        for name in keys:
            assert f"| [{section}] | {name} |" in page


def test_empty_folder(tmp_path: Path) -> None:
    folder = write(tmp_path / "x")
    for path in folder.iterdir():
        path.unlink()
    with pytest.raises(ScenarioError) as caught:
        read(
            folder,
            dict.fromkeys(("scenario.toml", "buses.csv", "branches.csv", "resources.csv", "offers.csv", "loads.csv")),
        )
    assert [fault.table for fault in caught.value.faults] == [
        "scenario.toml", "buses.csv", "branches.csv", "resources.csv", "loads.csv",
    ]  # fmt: skip
