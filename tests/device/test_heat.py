"""If these fail, a bleed resistor burns, or sweeps wait for one that is cold."""

from __future__ import annotations

from math import exp

import pytest
from fake_board import profile
from hypothesis import given, settings
from hypothesis import strategies as st

from kneewise.emulator.firmware import firmware_module

Heat = firmware_module("tracer.heat").Heat
ALLOWANCE_J, POWER_W, OHM, FARAD = 40.0, 10.0, 100.0, 220e-6  # as in the profile of the tests


LATER_US = 10**14


def cold(**changes):
    made = Heat(profile(**changes), 0)
    made.look(LATER_US, 0, True)
    assert made.mj() == 0
    return made


def test_after_a_reset_it_counts_as_full_and_cools_at_what_the_resistor_stands():
    made = Heat(profile(), 5_000_000)
    assert made.mj() == 1000 * ALLOWANCE_J
    assert made.spent()
    made.look(6_000_000, 0, True)
    assert made.mj() == 1000 * (ALLOWANCE_J - POWER_W)
    assert not made.spent()


@settings(max_examples=200)
@given(st.floats(1.0, 60.0), st.integers(1, 40))
def test_a_fall_puts_in_the_energy_of_the_capacitor_however_often_it_is_looked_at(volt, looks):
    """E = C V^2 / 2, whatever the steps."""
    made = cold(bleed_mw=1)
    made.begin(LATER_US, round(1000 * volt))
    tau_us = 1e6 * OHM * FARAD
    for look in range(1, looks + 1):
        passed = 10 * tau_us * look / looks
        made.look(LATER_US + round(passed), round(1000 * volt * exp(-passed / tau_us)), True)
    stored_mj = 1e3 * FARAD * volt**2 / 2
    assert made.mj() == pytest.approx(stored_mj, abs=1.5)


@settings(max_examples=200)
@given(st.floats(32.0, 60.0), st.integers(10_000, 200_000))
def test_a_live_source_puts_in_its_power_and_nothing_cools_meanwhile(volt, step_us):
    """P = V^2 / R above what the resistor stands for ever: 40 J are full after 40 J."""
    made = cold()
    now = LATER_US
    made.begin(now, round(1000 * volt))
    while not made.spent():
        now += step_us
        made.look(now, round(1000 * volt), True)
    spent_s = (now - LATER_US) * 1e-6
    assert spent_s * volt**2 / OHM == pytest.approx(ALLOWANCE_J, abs=step_us * 1e-6 * volt**2 / OHM)


def test_a_source_that_the_resistor_stands_for_ever_does_not_fill_it():
    made = cold()
    made.begin(LATER_US, 30_000)
    for look in range(1, 600):
        made.look(LATER_US + 100_000 * look, 30_000, True)
    assert made.mj() < 1000


def test_a_bleed_that_is_let_go_takes_nothing():
    made = cold()
    made.begin(LATER_US, 40_000)
    made.look(LATER_US + 10_000_000, 40_000, False)
    assert made.mj() == 0


@pytest.mark.parametrize(("mj", "rest_ms"), [(0, 0), (30_000, 0), (30_001, 1), (40_000, 1001)])
def test_rest_is_the_time_until_there_is_room(mj, rest_ms):
    made = Heat(profile(), 0)
    made.look(3_000_000, 0, True)
    assert made.mj() == 10_000
    assert made.rest_ms(mj) == rest_ms
