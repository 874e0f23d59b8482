"""If these fail, a bleed that does not work is not found, or is taken for something else."""

from __future__ import annotations

from math import exp, log

import pytest
from fake_board import profile
from hypothesis import given, settings
from hypothesis import strategies as st

from kneewise.emulator.firmware import firmware_module

bleeding = firmware_module("tracer.bleeding")
ln_x1000 = firmware_module("tracer.profile").ln_x1000

LOOK_US = 10_000
LIMIT_MV = 200
FARAD, OHM, PERMANENT_OHM = 220e-6, 100.0, 22e3  # as in the profile of the tests


def watched(
    *,
    from_v: float = 40.0,
    ohm: float = OHM,
    farad: float = FARAD,
    live: bool = False,
    current_off: int = 0,
    known_nf: int = 0,
    seconds: float = 5.0,
):
    """(finding or None, when it came in ms, the watch) of a bleed looked at every 10 ms.

    Until the contact has closed, 6 ms after the command, the permanent bleeder alone works. `live`:
    the source holds the capacitor.
    """
    watch = bleeding.Bleed(profile())
    watch.begin(0, round(1000 * from_v))
    watch.capacitance_nf = known_nf
    both = 1.0 / (1.0 / ohm + 1.0 / PERMANENT_OHM)
    us = 0
    while us < 1e6 * seconds:
        us += LOOK_US
        volt = (
            from_v * exp(-6e-3 / (PERMANENT_OHM * farad)) * exp((6e-3 - 1e-6 * us) / both / farad)
        )
        millivolt = round(1000 * (from_v if live else volt))
        found = watch.look(us, millivolt, 40_000, current_off, LIMIT_MV)
        if found is not None:
            return found, us // 1000, watch
        if millivolt <= LIMIT_MV:
            break
    return None, us // 1000, watch


def test_a_good_bleed_is_no_finding_and_gives_its_time_constant():
    found, ms, watch = watched()
    assert found is None
    assert ms <= 140
    assert abs(watch.tau_us / 21_900 - 1) < 0.02  # R beside the permanent bleeder, times C


@settings(max_examples=200)
@given(st.floats(5, 60), st.floats(75, 130), st.floats(0.95, 1.3))
def test_within_the_tolerances_of_its_parts_there_is_never_a_finding(from_v, ohm, share):
    found, _, watch = watched(from_v=from_v, ohm=ohm, farad=FARAD * min(share, 140 / ohm))
    assert found is None, (found, watch.tau_us)


def test_an_open_bleed_is_told_from_a_live_source():
    """With the permanent bleeder alone, 40 V fall by 8 V a second, which no source lets happen."""
    found, ms, _ = watched(ohm=1e9)
    assert found[0] == 1
    assert 30000 < found[1] <= 40000
    assert found[2:] == (LIMIT_MV, bleeding.UNIT_MV)
    assert ms <= 100


def test_a_source_that_feeds_the_capacitor_through_the_bleed_is_found_by_its_current():
    found, ms, _ = watched(live=True, current_off=77)
    assert found == (2, 40000, LIMIT_MV, bleeding.UNIT_MV)
    assert ms <= 50


def test_a_source_is_found_without_that_current_too():
    """So with a bleed that is open as well, or of so high a resistance that its current is lost."""
    found, ms, _ = watched(live=True)
    assert found[0] == 2
    assert ms <= 200


def test_a_channel_that_is_stuck_is_not_taken_for_a_live_source():
    found, _, _ = watched(from_v=16.0, live=True)
    assert found[0] == 11


def test_one_reading_of_current_is_no_finding():
    watch = bleeding.Bleed(profile())
    watch.begin(0, 40_000)
    offs = [0, 30, 30, 0, 30, 30, 0]
    for look, off in enumerate(offs, 1):
        fallen = round(40_000 * exp(-0.45 * look))
        assert watch.look(10_000 * look, fallen, 40_000, off, LIMIT_MV) is None


def test_a_capacitor_that_rises_is_fed():
    watch = bleeding.Bleed(profile())
    watch.begin(0, 10_000)
    assert watch.look(10_000, 10_050, 40_000, 0, LIMIT_MV) is None
    assert watch.look(20_000, 10_250, 40_000, 0, LIMIT_MV)[0] == 2


@pytest.mark.parametrize("ohm", [0.05, 1.0, 5.0])
def test_a_shorted_bleed_is_told(ohm):
    found, ms, _ = watched(ohm=ohm)
    assert found[0] == 10
    assert found[1] < found[2] == 70_000
    assert found[3] == bleeding.UNIT_MOHM
    assert ms <= 20


def test_a_bleed_of_too_low_a_resistance_is_told_by_its_time_constant():
    found, _, _ = watched(ohm=50.0)
    assert found[0] == 10
    assert abs(found[1] / 50_000 - 1) < 0.05


def test_a_small_capacitor_is_not_taken_for_a_low_resistance_where_the_sweep_has_measured_it():
    assert watched(farad=0.5 * FARAD)[0][0] == 10
    assert watched(farad=0.5 * FARAD, known_nf=110_000)[0] is None


def test_a_bleed_that_is_too_slow_is_told():
    found, _, _ = watched(ohm=300.0)
    assert found[0] == 1


def test_before_its_contact_has_closed_nothing_is_judged():
    watch = bleeding.Bleed(profile())
    watch.begin(0, 40_000)
    assert watch.look(7_999, 100, 40_000, 500, LIMIT_MV) is None
    assert watch.look(8_000, 100, 40_000, 500, LIMIT_MV)[0] == 10


@settings(max_examples=400)
@given(st.integers(1, 10**6), st.integers(1, 10**6))
def test_the_logarithm_is_good_to_a_thousandth_of_its_unit(a, b):
    high, low = max(a, b), min(a, b)
    assert abs(ln_x1000(high, low) - 1000 * log(high / low)) <= 1
