"""If these fail, sweeps end before their end, or crawl on until the time limit."""

import pytest
from charging import FINE
from fake_board import hal, profile
from hypothesis import given, settings
from hypothesis import strategies as st
from narrow import SmallWord

from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.ending")
charge = firmware_module("tracer.charge")

ZERO = 40 * 16
OPEN = 2400 * 16
VOLTAGE_ZERO = 24 * 16


def rule():
    made = module.EndRule()
    made.begin(ZERO, OPEN, VOLTAGE_ZERO)
    return made


def ended_after(voltages, currents):
    """Number of the slice at which the rule says complete, or None."""
    made = rule()
    for number, pair in enumerate(zip(voltages, currents, strict=True), start=1):
        if made.complete(*pair):
            return number
    return None


def test_current_gone_and_voltage_there_for_three_slices_is_the_end():
    voltages = [OPEN // 2] * 5 + [OPEN] * 9
    currents = [ZERO + 16 * 1800] * 5 + [ZERO + 3] * 9
    assert ended_after(voltages, currents) == 5 + module.END_SLICES


@settings(max_examples=300)
@given(
    st.integers(16 * 20, 16 * 4000),
    st.lists(st.tuples(st.integers(0, 65520), st.integers(0, 65520)), min_size=1, max_size=40),
)
def test_never_while_more_than_a_500th_of_the_peak_flows(peak, slices):
    made = rule()
    assert not made.complete(0, ZERO + peak)
    for voltage, current in slices:
        flowing = max(current, ZERO + max(made.peak_x16, current - ZERO) // 500 + 4)
        assert not made.complete(voltage, flowing)


@settings(max_examples=300)
@given(st.lists(st.booleans(), min_size=1, max_size=60))
def test_three_quiet_slices_must_follow_each_other(quiet):
    made = rule()
    made.complete(OPEN, ZERO + 16000)
    run = 0
    for still in quiet:
        ended = made.complete(OPEN, ZERO if still else ZERO + 1000)
        run = run + 1 if still else 0
        assert ended is (run >= module.END_SLICES)
        if ended:
            break


def test_a_nearly_dark_substring_that_crawls_is_waited_for():
    # 0.5 % of the peak still flows, the voltage gains less than a sixteenth of a code a slice.
    voltages = [OPEN // 2] * 3 + [OPEN // 2 + n // 8 for n in range(4000)]
    currents = [ZERO + 16 * 1800] * 3 + [ZERO + 16 * 9] * 4000
    assert ended_after(voltages, currents) is None


def test_a_voltage_still_rising_far_from_the_end_is_waited_for():
    voltages = [OPEN // 2 + 50 * n for n in range(400)]
    currents = [ZERO + 16 * 1800] + [ZERO + 2] * 399
    near = next(n for n, v in enumerate(voltages) if v >= OPEN - (OPEN - VOLTAGE_ZERO) // 1000)
    assert ended_after(voltages, currents) == near + module.END_SLICES


def test_an_end_below_the_open_voltage_is_found_once_it_stands():
    # A cloud came after the reading: the charge ends 3 % low.
    voltages = [min(OPEN // 2 + 200 * n, 97 * OPEN // 100) for n in range(400)]
    currents = [ZERO + 16 * 1800] + [ZERO + 2] * 399
    assert ended_after(voltages, currents) is not None


def test_a_current_below_its_zero_is_gone():
    assert ended_after([OPEN] * 8, [ZERO + 1600] * 2 + [ZERO - 30] * 6) == 5


def test_at_the_lowest_light_a_quarter_of_a_code_counts_as_gone():
    # The peak is 9 codes: a 500th of it would be a third of a sixteenth.
    assert ended_after([OPEN] * 9, [ZERO + 144] * 2 + [ZERO + 3] * 7) == 5
    assert ended_after([OPEN] * 9, [ZERO + 144] * 2 + [ZERO + 4] * 7) is None


def test_what_the_permanent_bleeder_draws_at_low_light_is_no_current_of_the_source():
    """1.8 mA into 22 kohm are a third of a code at full voltage, and more than gone."""
    made = module.EndRule(*profile(permanent_bleeder_ohm=2200).leak())
    plain = rule()
    for each in (made, plain):
        each.begin(ZERO, OPEN, VOLTAGE_ZERO)
        assert not each.complete(OPEN // 2, ZERO + 144)
    volts = (OPEN - VOLTAGE_ZERO) / 16 * 0.0165
    leak_x16 = round(16 * volts / 2200 / 0.0052)
    assert leak_x16 > 40
    ended = [[each.complete(OPEN, ZERO + leak_x16) for _ in range(5)] for each in (made, plain)]
    assert ended == [[False, False, True, True, True], [False] * 5]


@pytest.mark.parametrize("fine", [False, True])
@settings(max_examples=200)
@given(st.data())
def test_nothing_in_the_rule_needs_an_object(fine, data):
    """It runs with the heap locked, where numbers end at 30 bits."""
    finer = 16 if fine else 1
    rail = 16 * (4096 * finer - 1)
    code = st.integers(0, rail) | st.sampled_from([0, rail])
    resistor = data.draw(st.sampled_from([0, 1, 2200, 22_000, 2**32 - 1]))
    ratio, shift = profile(**(FINE if fine else {}), permanent_bleeder_ohm=resistor).leak()
    made = module.EndRule(SmallWord(ratio), SmallWord(shift))
    zero, open_x16, voltage_zero = (SmallWord(data.draw(code)) for _ in range(3))
    made.begin(zero, open_x16, voltage_zero, finer)
    for voltage, current in data.draw(st.lists(st.tuples(code, code), max_size=12)):
        made.complete(SmallWord(voltage), SmallWord(current))


REASONS = {
    hal.TRIP_STOP_LOOP: charge.STOP_LOOP,
    hal.TRIP_OVER_VOLTAGE: charge.OVER_VOLTAGE,
    hal.TRIP_OVER_CURRENT: charge.OVER_CURRENT,
}


@pytest.mark.parametrize("trips", range(1, 8))
def test_of_several_trips_the_person_at_the_lid_comes_first(trips):
    first = next(bit for bit in REASONS if trips & bit)
    assert charge.trip_reason(trips) == REASONS[first]
