"""If these fail, a user with a mistyped scenario gets a riddle, or a wrong device in silence."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

import pytest

from kneewise.emulator.scenario import Scenario, example_text
from kneewise.errors import ScenarioError

EXAMPLE = example_text()
START_FROM = "`kneewise emulate --example` prints a whole scenario to start from"


def test_the_default_is_the_shipped_example_with_the_reference_module() -> None:
    scenario = Scenario.default()
    assert scenario.title == "Clear noon"
    assert scenario.build_source().truth()["pmp"] == pytest.approx(275.6078, abs=5e-5)
    circuit = scenario.build_circuit()
    assert circuit.capacitance_f == 2200e-6
    assert circuit.line_ohm == pytest.approx(0.075)
    assert circuit.leak_siemens(bleed_closed=True) == pytest.approx(1 / 100 + 1 / 22e3)


def test_the_example_shows_every_key_that_may_be_given() -> None:
    uncommented = re.sub(r"^# (\w+ = )", r"\1", EXAMPLE, flags=re.MULTILINE)
    given = tomllib.loads(uncommented)
    schema = Scenario.model_json_schema(by_alias=True)["$defs"]
    for section, name in (("source", "Source"), ("load", "Load"), ("board", "Board")):
        assert set(given[section]) == set(schema[f"{name}Section"]["properties"])


def test_content_comes_back_as_the_same_scenario(tmp_path: Path) -> None:
    path = tmp_path / "noon.toml"
    path.write_text(EXAMPLE, encoding="utf-8")
    scenario = Scenario.load(path)
    assert scenario == Scenario.default()
    assert scenario.content()["load"]["bleed_ohm"] == 100.0
    assert scenario.varied() == scenario


def test_photocurrent_scales_with_irradiance() -> None:
    low = Scenario.default().varied(source={"irradiance_w_m2": 200.0})
    assert low.build_source().photocurrent_a == pytest.approx(9.2 / 5)


def test_cells_ideality_and_temperature_give_the_thermal_voltage() -> None:
    """k T / q at 25 degC is 25.693 mV (CODATA 2018, exact constants)."""
    source = {
        "n_ns_vt_v": None,
        "cells_in_series": 60,
        "ideality": 1.0,
        "cell_temperature_c": 25.0,
    }
    made = Scenario.default().varied(source=source)
    assert made.build_source().n_ns_vt_v == pytest.approx(60 * 0.025692579, rel=1e-8)


CASES = [
    (
        ("photocurrent_a = 9.2", "photocurent_a = 9.2"),
        "found an unknown key source.photocurent_a (and 1 more); expected photocurrent_a. "
        "Next: rename it to photocurrent_a",
    ),
    (("[board]", "[bord]"), "found an unknown key bord; expected board. Next: rename it to board"),
    (
        ("seed = 1", "zz = 0\nseed = 1"),
        "found an unknown key zz; expected one of title, place, seed, source, load, board. "
        "Next: remove zz",
    ),
    (
        ("irradiance_w_m2 = 1000.0", "irradiance_w_m2 = 2500.0"),
        "found source.irradiance_w_m2 = 2500.0; expected a number at least 0.0 and at most "
        "2000.0. Next: correct source.irradiance_w_m2",
    ),
    (
        ("irradiance_w_m2 = 1000.0", 'irradiance_w_m2 = "bright"'),
        "found source.irradiance_w_m2 = 'bright'; expected a number at least 0.0",
    ),
    (
        ("shunt_resistance_ohm = 350.0", "shunt_resistance_ohm = nan"),
        "found source.shunt_resistance_ohm = nan; expected a number at least 0.1",
    ),
    (
        ("saturation_current_a = 2e-10", "saturation_current_a = 0.0"),
        "found source.saturation_current_a = 0.0; expected a number above 0.0 and at most 0.01",
    ),
    (("seed = 1", "seed = 1.5"), "found seed = 1.5; expected a whole number at least 0"),
    (("seed = 1", "seed = true"), "found seed = true; expected a whole number at least 0"),
    (
        ("leads_reversed = false", "leads_reversed = 1"),
        "found board.leads_reversed = 1; expected true or false",
    ),
    (
        ('title = "Clear noon"', 'title = ""'),
        "found title = ''; expected text of at least 1 character",
    ),
    (
        ("capacitance_f = 2200e-6", ""),
        "found no load.capacitance_f; expected a number at least 1e-06 and at most 100.0. "
        f"Next: add load.capacitance_f; {START_FROM}",
    ),
    (
        ("n_ns_vt_v = 1.62", "n_ns_vt_v = 1.62\nideality = 1.1"),
        "found n_ns_vt_v, ideality in [source]; expected either n_ns_vt_v, or cells_in_series "
        "with ideality and cell_temperature_c. Next: give exactly one of the two ways",
    ),
    (("n_ns_vt_v = 1.62", ""), "found neither way in [source]; expected either n_ns_vt_v"),
    (
        ("n_ns_vt_v = 1.62", "cells_in_series = 60"),
        "found cells_in_series in [source]; expected either n_ns_vt_v",
    ),
    (
        ("capacitance_of_nominal = 1.0", "capacitance_of_nominal = 0.0"),
        "found load.capacitance_of_nominal = 0.0; expected a number at least 0.05 and at most 5.0. "
        "Next: correct load.capacitance_of_nominal",
    ),
    (
        ("bleed_of_nominal = 1.0", "bleed_of_nominal = 1000.0"),
        "found load.bleed_of_nominal = 1000.0; expected a number at least 0.0001 and at most 100.0",
    ),
    (
        ('contact = "relay+switch"', 'contact = "switch"'),
        'found board.contact = \'switch\'; expected "relay+switch" or "relay"',
    ),
    (
        ("bounce_ms = 0.0", "bounce_ms = 21.0"),
        "found board.bounce_ms = 21.0; expected a number at least 0.0 and at most 20.0",
    ),
    (
        ("# voltage_stuck_code = 0 ", "voltage_stuck_code = 4096 "),
        "board.voltage_stuck_code = 4096; expected a whole number at least 0 and at most 4095",
    ),
    (
        ("switch_shorted = false", "switch_shorted = 1"),
        "found board.switch_shorted = 1; expected true or false",
    ),
    (("[source]", "[[source]]"), "expected a section [source]. Next: correct source"),
    (
        ("seed = 1", "seed = = 1"),
        "(at line 6, column 8); expected a scenario in TOML. "
        f"Next: correct that line; {START_FROM}",
    ),
]


@pytest.mark.parametrize(("change", "message"), CASES)
def test_what_is_wrong_is_named_with_what_it_may_be(
    change: tuple[str, str], message: str, tmp_path: Path
) -> None:
    path = tmp_path / "mine.toml"
    assert change[0] in EXAMPLE
    path.write_text(EXAMPLE.replace(*change, 1), encoding="utf-8")
    with pytest.raises(ScenarioError) as caught:
        Scenario.load(path)
    assert str(caught.value).startswith(f"reading scenario {path}: found ")
    assert message in str(caught.value)


def test_a_file_that_cannot_be_read_says_so(tmp_path: Path) -> None:
    with pytest.raises(ScenarioError, match=r"no readable file .*; expected a scenario in TOML"):
        Scenario.load(tmp_path / "nowhere.toml")
    (tmp_path / "latin.toml").write_bytes(b'title = "\xe9"')
    with pytest.raises(ScenarioError, match="not UTF-8 text"):
        Scenario.load(tmp_path / "latin.toml")


def test_a_varied_scenario_is_checked_as_well() -> None:
    with pytest.raises(ScenarioError, match=r"varying scenario Clear noon: .* load\.bleed_ohm = 0"):
        Scenario.default().varied(load={"bleed_ohm": 0})
    with pytest.raises(ScenarioError, match=r"source = 3; expected a section \[source\]"):
        Scenario.default().varied(source=3)
