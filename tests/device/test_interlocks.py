"""If these fail, a guard lets a sweep start that can hurt someone, or stands in the way of all."""

from __future__ import annotations

import pytest
from fake_board import profile
from hypothesis import given, settings
from hypothesis import strategies as st

from kneewire.hazards import HAZARDS
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
    numbers = {guard(reference, found)[0] for guard in module.BEFORE_CLOSING[1:]}
    assert numbers == {12, 5, 11, 4, 19, 20, 1}
    assert numbers | {14, 2} <= set(HAZARDS)


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


# -- bleeding ------------------------------------------------------------------------------

FROM_MV, LIMIT_MV = 40000, 200


def progress(now_mv, elapsed_ms, from_mv=FROM_MV, limit_mv=LIMIT_MV):
    return module.bleed_progress(profile(), from_mv, now_mv, elapsed_ms, limit_mv)


def allowed_ms(from_mv=FROM_MV, limit_mv=LIMIT_MV):
    return profile().predicted_bleed_ms(from_mv, limit_mv) * 150 // 100


def test_a_bleed_that_ends_in_its_time_is_no_finding():
    assert progress(LIMIT_MV, 10**6) is None
    assert progress(FROM_MV, 0) is None
    assert progress(LIMIT_MV + 1, allowed_ms()) is None
    assert progress(LIMIT_MV + 1, allowed_ms() + 1) == (1, LIMIT_MV + 1, LIMIT_MV, module.UNIT_MV)


@pytest.mark.parametrize(
    ("now_mv", "number"), [(40000, 2), (20001, 2), (20000, 1), (12001, 1), (201, 1), (45000, 2)]
)
def test_a_welded_contact_is_told_from_a_slow_bleed(now_mv, number):
    assert progress(now_mv, allowed_ms() + 1)[0] == number


def test_what_may_be_touched_is_not_called_live():
    assert progress(12000, 10**6, from_mv=13000)[0] == 1
    assert progress(12001, 10**6, from_mv=13000)[0] == 2


def test_a_short_bleed_has_a_tenth_of_a_second_at_least():
    assert progress(201, 100, from_mv=201) is None
    assert progress(201, 101, from_mv=201) is not None


@settings(max_examples=300)
@given(st.integers(-100, 60000), st.integers(-100, 60000), st.integers(0, 10**6))
def test_below_the_limit_there_is_never_a_finding_and_far_beyond_the_time_always(a, b, elapsed):
    found = progress(b, elapsed, from_mv=a)
    if b <= LIMIT_MV:
        assert found is None
    elif elapsed > max(allowed_ms(max(a, 0)), 100):
        assert found[0] in (1, 2)
        assert found[1:] == (b, LIMIT_MV, module.UNIT_MV)
    else:
        assert found is None
