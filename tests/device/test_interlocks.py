"""If these fail, a guard lets a sweep start that can hurt someone, or stands in the way of all."""

from __future__ import annotations

import pytest
from fake_board import profile
from hypothesis import given, settings
from hypothesis import strategies as st

from kneewire.hazards import GUARDS, HAZARDS, MEASURED
from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.interlocks")
CONVERSIONS = 64
MV = 16.5  # of a code, in the reference profile


def readings(made=None, **changes):
    """A module in the sun, an empty capacitor, all switches as they should be."""
    found = module.Readings(
        made or profile(), CONVERSIONS * 2433, CONVERSIONS * 40, CONVERSIONS * 24, CONVERSIONS
    )
    found.confirmed = True
    for name, value in changes.items():
        setattr(found, name, value)
    return found


def finding(made, found):
    return module.first_finding(module.BEFORE_CLOSING, made, found)


def test_a_module_in_the_sun_may_be_swept(reference):
    assert finding(reference, readings()) is None


def test_every_guard_names_a_hazard_that_a_person_can_read_about(reference):
    found = readings(
        stop_loop_closed=False,
        leads_reversed=True,
        confirmed=False,
        source_mv=61000,
        capacitor_mv=30000,
        current_sum=CONVERSIONS * 3000,
    )
    found.heat_mj = 40_000
    found.voltage_zero_sum = CONVERSIONS * 100
    spoken = [guard(reference, found) for guard in module.BEFORE_CLOSING[1:]]
    numbers = {finding[0] for finding in spoken if finding is not None}
    assert numbers == {12, 5, 11, 4, 19, 20, 1, 10}
    assert set(HAZARDS) == set(MEASURED) == set(GUARDS) == set(range(1, 22))


def test_without_a_profile_nothing_is_asked_but_the_profile():
    bare = module.Readings(None, 0, 0, 0, CONVERSIONS)
    assert finding(None, bare) == (14, 0, 0, module.UNIT_NONE)


@pytest.mark.parametrize(
    ("change", "number"),
    [({"stop_loop_closed": False}, 12), ({"leads_reversed": True}, 5), ({"confirmed": False}, 20)],
)
def test_switches_are_obeyed(reference, change, number):
    assert finding(reference, readings(**change)) == (number, 0, 0, module.UNIT_NONE)


@pytest.mark.parametrize(
    ("off", "refused"), [(-25, True), (-24, False), (0, False), (24, False), (25, True)]
)
def test_a_current_channel_off_its_zero_is_refused(reference, off, refused):
    found = module.zero_current(reference, readings(current_sum=CONVERSIONS * (40 + off)))
    assert found == ((11, off, 24, module.UNIT_CODES) if refused else None)


@pytest.mark.parametrize("stuck", [0, 4095])
def test_a_current_channel_at_a_rail_is_refused(stuck):
    made = profile(current_zero_x16=2048 * 16)
    assert module.zero_current(made, readings(made, current_sum=CONVERSIONS * stuck))[0] == 11


@pytest.mark.parametrize(("source_mv", "refused"), [(49999, 0), (50000, 0), (50001, 4)])
def test_a_source_above_the_rating_is_refused(source_mv, refused):
    made = profile(rated_mv=50000)
    found = module.source_rating(made, readings(source_mv=source_mv))
    assert found == ((4, source_mv, 50000, module.UNIT_MV) if refused else None)


@pytest.mark.parametrize(("code", "refused"), [(4089, False), (4090, True), (4095, True)])
def test_a_voltage_at_the_rail_may_be_any_voltage(code, refused):
    made = profile(voltage_nv_per_code=1_000_000)
    found = module.source_rating(made, readings(made, voltage_sum=CONVERSIONS * code))
    assert (found is not None) is refused


@pytest.mark.parametrize(
    ("source_mv", "rating_v", "day", "refused"),
    [
        (60000, 0, 0, False),
        (60001, 0, 0, True),
        (60001, 1000, 0, True),
        (60001, 0, 20000, True),
        (60001, 61, 20000, False),
        (60001, 60, 20000, True),
        (900_000, 1000, 20000, False),
        (1_000_000, 1000, 20000, True),
    ],
)
def test_above_60_v_a_declared_and_tested_barrier_is_needed(source_mv, rating_v, day, refused):
    made = profile(isolation_v=rating_v, isolation_tested_day=day)
    found = module.isolation(made, readings(source_mv=source_mv))
    assert found == ((19, source_mv, 60000, module.UNIT_MV) if refused else None)


def test_start_limit_is_a_share_of_the_open_voltage_but_not_below_three_codes():
    made = profile(start_permyriad=50)
    assert module.start_limit_mv(made, 40000) == 200
    assert module.start_limit_mv(made, 1000) == 50
    assert module.start_limit_mv(made, -500) == 50
    assert module.start_limit_mv(profile(start_permyriad=1), 40000) == 50


@pytest.mark.parametrize(("capacitor_mv", "refused"), [(-30, 0), (199, 0), (200, 0), (201, 1)])
def test_a_capacitor_that_is_not_empty_is_refused(reference, capacitor_mv, refused):
    found = module.empty_to_start(reference, readings(source_mv=40000, capacitor_mv=capacitor_mv))
    assert found == ((1, capacitor_mv, 200, module.UNIT_MV) if refused else None)


@settings(max_examples=500)
@given(
    st.integers(0, 4095),
    st.integers(0, 4095),
    st.integers(0, 4095),
    st.booleans(),
    st.booleans(),
    st.booleans(),
)
def test_no_reading_lets_a_sweep_start_that_one_guard_refuses(
    voltage, current, capacitor, closed, turned, confirmed
):
    made = profile()
    codes = (CONVERSIONS * code for code in (voltage, current, capacitor))
    found = module.Readings(made, *codes, CONVERSIONS)
    found.stop_loop_closed, found.leads_reversed, found.confirmed = closed, turned, confirmed
    source_mv = (voltage - 24) * MV
    fine = (
        closed
        and confirmed
        and not turned
        and abs(current - 40) <= 24
        and source_mv < 60001
        and (capacitor - 24) * MV <= max(source_mv * 0.005, 50)
    )
    first = finding(made, found)
    near = abs((capacitor - 24) * MV - max(source_mv * 0.005, 50)) <= 2
    assert (first is None) == fine or near


@pytest.mark.parametrize(("off", "refused"), [(-25, True), (-24, False), (24, False), (25, True)])
def test_a_voltage_channel_off_its_zero_is_refused(reference, off, refused):
    found = readings()
    assert module.zero_voltage(reference, found) is None
    found.voltage_zero_sum = CONVERSIONS * (24 + off)
    expected = (11, off, 24, module.UNIT_CODES) if refused else None
    assert module.zero_voltage(reference, found) == expected


@pytest.mark.parametrize(("code", "refused"), [(4089, False), (4090, True), (4095, True)])
def test_a_capacitor_channel_at_its_rail_may_hide_any_voltage(reference, code, refused):
    found = readings(capacitor_sum=CONVERSIONS * code)
    expected = (11, code, 4090, module.UNIT_CODES) if refused else None
    assert module.capacitor_in_range(reference, found) == expected


@pytest.mark.parametrize(("exercise", "limit_mv"), [(0, 60000), (1, 1000), (2, 1000), (3, 60000)])
def test_an_exercise_wants_the_source_away_unless_it_is_the_relay_that_is_left_open(
    reference, exercise, limit_mv
):
    found = readings(source_mv=limit_mv, exercise=exercise)
    assert module.source_rating(reference, found) is None
    found.source_mv += 1
    assert module.source_rating(reference, found) == (4, limit_mv + 1, limit_mv, module.UNIT_MV)


def test_a_sweep_may_ask_for_a_lower_limit_and_never_for_a_higher(reference):
    found = readings(source_mv=40001, limit_mv=40000)
    assert module.source_rating(reference, found) == (4, 40001, 40000, module.UNIT_MV)
    found = readings(source_mv=60001, limit_mv=70000)
    assert module.source_rating(reference, found) == (4, 60001, 60000, module.UNIT_MV)


@pytest.mark.parametrize(("heat_mj", "refused"), [(39_824, False), (39_825, True), (40_000, True)])
def test_a_bleed_without_room_for_the_next_sweep_is_left_to_cool(reference, heat_mj, refused):
    """220 uF at 40 V hold 176 mJ; the resistor may take 40 J."""
    found = readings(source_mv=40_000, heat_mj=heat_mj)
    expected = (10, heat_mj + 176, 40_000, module.UNIT_MJ) if refused else None
    assert module.bleed_cool(reference, found) == expected


@pytest.mark.parametrize(("apart_mv", "refused"), [(-3601, 1), (-3600, 0), (3600, 0), (3601, 1)])
def test_source_and_capacitor_must_agree_once_they_were_joined(reference, apart_mv, refused):
    found = module.sensors_agree(reference, 30_000, 30_000 + apart_mv)
    assert found == ((11, apart_mv, 3600, module.UNIT_MV) if refused else None)


@pytest.mark.parametrize(
    ("nf", "limit"), [(153_999, 154_000), (154_000, 0), (286_000, 0), (286_001, 286_000)]
)
def test_a_capacitance_outside_its_limits_is_a_finding(reference, nf, limit):
    found = module.capacitance(reference, nf)
    assert found == ((15, nf, limit, module.UNIT_NF) if limit else None)
