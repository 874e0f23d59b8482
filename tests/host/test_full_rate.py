"""Pairs kept one by one: asked for within limits, and right in volts, amperes and seconds."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from kneewire import catalogue
from kneewise import FullRate
from kneewise.errors import RefusedError, UsageError
from kneewise.instrument.arming import Asked, arm
from kneewise.instrument.checks import _closed_for_good, _pairs_add_up, _zeros
from kneewise.instrument.full_rate import END_PAIRS, FullRatePairs, Window
from kneewise.instrument.linearity import WIDE_CODES, edges
from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import RawKnots, RawPairs
from kneewise.link.refusals import CODES

PAIR_US = 4
PROFILE = {"pair_us": PAIR_US, "current_delay_ns": 0}
PLAIN = Scales(
    voltage_v_per_code=0.0165,
    voltage_zero_code=24.0,
    current_a_per_code=0.0052,
    current_zero_code=40.0,
    capacitor_v_per_code=0.0165,
    capacitor_zero_code=24.0,
    voltage_delay_s=0.0,
    current_delay_s=0.0,
    divider_ohm=1e12,
    lead_ohm=0.0,
    capacitance_f=2.2e-3,
    safe_v=12.0,
    code_max=4095,
    wide_code_lsb=1.0,
)


def kept(voltage: Any, current: Any, *, skew_ns: int = 2000, **scales: Any) -> FullRatePairs:
    """Pairs from number 1000 on."""
    codes = (np.asarray(each, dtype=np.uint16) for each in (voltage, current))
    return FullRatePairs(
        raw=RawPairs(1000, *codes),
        asked=None,
        pair_ns=1000 * PAIR_US,
        skew_ns=skew_ns,
        scales=replace(PLAIN, **scales),
    )


def test_a_point_is_the_source_at_the_instant_of_its_current() -> None:
    """Without the skew taken out every voltage would be 2 us old: 8 mV at 9.2 A into 2.2 mF."""
    rising = 100 + 10 * np.arange(50)
    pairs = kept(rising, np.full(50, 1040))
    assert pairs.time == pytest.approx(4e-6 * (1000 + np.arange(50)) + 2e-6)
    assert pairs.voltage == pytest.approx((rising + 5.0 - 24.0) * 0.0165)
    assert pairs.current == pytest.approx(np.full(50, 5.2))
    assert pairs.stretch_s == pytest.approx((4e-3, 4.2e-3))


@pytest.mark.parametrize("later_us", [-30.0, 30.0])
def test_a_slow_filter_is_taken_out_and_the_ends_carried_on(later_us: float) -> None:
    delays = {"voltage_delay_s": max(later_us, 0.0) * 1e-6}
    delays["current_delay_s"] = max(-later_us, 0.0) * 1e-6
    pairs = kept(100 + 20 * np.arange(50), np.full(50, 40), skew_ns=0, **delays)
    expected = (100 + 20 * (np.arange(50) + later_us / PAIR_US) - 24.0) * 0.0165
    assert pairs.voltage == pytest.approx(expected)
    assert pairs.time[0] == pytest.approx(4e-3 - delays["current_delay_s"])


def test_ends_are_carried_on_along_many_pairs_and_not_along_the_noise_of_two() -> None:
    codes = np.full(200, 1000)
    codes[-1] += END_PAIRS
    assert kept(codes, np.full(200, 40)).voltage[-1] == pytest.approx(976 * 0.0165, abs=0.1)


def test_the_divider_s_current_and_two_wire_leads_are_counted_in() -> None:
    pairs = kept([1024] * 3, [1040] * 3, divider_ohm=1e4, lead_ohm=0.1)
    current = 5.2 + 16.5 / 1e4
    assert pairs.current == pytest.approx([current] * 3)
    assert pairs.voltage == pytest.approx([16.5 + 0.1 * current] * 3)


def test_a_code_stands_for_the_middle_of_its_inputs() -> None:
    """Else a current would jump by 4 codes where the converter holds a code too long."""
    every = np.arange(4096)
    pairs = kept(np.zeros(4096), every, wide_code_lsb=9.0)
    inputs = pairs.current / 0.0052 + 40.0 - pairs.voltage / 1e12 / 0.0052
    below = edges(9.0, 4095)
    assert inputs[1:-1] == pytest.approx(0.5 * (below[1:] + below[:-1]))
    assert (np.diff(inputs) > 0).all()
    assert abs(inputs[WIDE_CODES[0]] - WIDE_CODES[0]) < 4.5


@pytest.mark.parametrize("count", [0, 1])
def test_few_pairs_or_none_are_points_as_well(count: int) -> None:
    pairs = kept([500] * count, [600] * count)
    assert len(pairs) == len(pairs.voltage) == len(pairs.current) == len(pairs.time) == count


def test_a_stretch_becomes_a_window_in_whole_pairs() -> None:
    asked = FullRate(start_s=0.0065, duration_s=0.008)
    asked.check(PROFILE, 10.0)
    assert asked.window(PROFILE) == Window(6500, 2000)
    late = {**PROFILE, "current_delay_ns": 100_000}
    assert asked.window(late).from_us == 6600
    assert FullRate(start_s=0.0).window({**PROFILE, "pair_us": 10}) == Window(0, 2048, True)


def test_about_the_maximum_and_never_before_the_beginning() -> None:
    window = FullRate(duration_s=0.004).window(PROFILE, 0.010)
    assert (window.from_us, window.pairs, window.shrinks) == (8000, 1000, False)
    assert FullRate().window(PROFILE, 0.002).from_us == 0
    smaller = FullRate().window(PROFILE, 0.002).smaller()
    assert (smaller.from_us, smaller.pairs) == (0, 1024)
    # Half as long it still holds the maximum in its middle.
    assert smaller.smaller().from_us == 2000 - 256 * PAIR_US
    assert FullRate(start_s=0.003).window(PROFILE).smaller().from_us == 3000


@pytest.mark.parametrize(
    ("asked", "found", "expected"),
    [
        ((0.0, 0.01), "a stretch of 10 ms, 2500 pairs", "0.004 to 8.192 ms"),
        ((0.0, float("inf")), "inf ms", "2048 pairs at one every 4 us"),
        ((0.0, 0.0), "a stretch of 0 ms", "0.004 to 8.192 ms"),
        ((0.0, float("nan")), "nan ms", "0.004 to 8.192 ms"),
        ((0.0, 1e-6), "0 pairs", "0.004 to 8.192 ms"),
        ((-0.001, 0.001), "a stretch from -1 ms on", "before the longest closed time, 10000 ms"),
        ((10.0, 0.001), "from 10000 ms on", "longest closed time, 10000 ms"),
        ((float("nan"), 0.001), "from nan ms on", "longest closed time"),
    ],
)
def test_what_cannot_be_had_is_refused_with_the_limit(
    asked: tuple[float, float], found: str, expected: str
) -> None:
    start_s, duration_s = asked
    with pytest.raises(UsageError) as caught:
        FullRate(start_s=start_s, duration_s=duration_s).check(PROFILE, 10.0)
    assert found in caught.value.found
    assert expected in caught.value.expected


class Scarce:
    """A session with a device that has memory for so many pairs."""

    def __init__(self, room: int) -> None:
        self.room = room
        self.asked: list[tuple[int, int]] = []

    def request(self, name: str, values: dict[str, int]) -> dict[str, int]:
        self.asked.append((values["raw_from_us"], values["raw_pairs"]))
        if values["raw_pairs"] > self.room:
            code = CODES["out of range"]
            raise RefusedError("arm", found="", expected="", next_step="", code=code)
        return {"token": 7}


def test_as_long_as_memory_allows() -> None:
    session = Scarce(600)
    window = FullRate().window(PROFILE, 0.010)
    token, armed = arm(session, Asked(), window, True)  # type: ignore[arg-type]
    assert (token, armed.pairs) == (7, 512)
    assert session.asked == [(10_000 - PAIR_US * n // 2, n) for n in (2048, 1024, 512)]


def test_a_length_that_was_asked_for_is_not_cut_down() -> None:
    with pytest.raises(RefusedError, match=r"2000 raw pairs to be kept.*no memory"):
        arm(Scarce(600), Asked(), Window(0, 2000), True)  # type: ignore[arg-type]
    with pytest.raises(RefusedError, match="128 raw pairs to be kept"):
        arm(Scarce(10), Asked(), FullRate().window(PROFILE), True)  # type: ignore[arg-type]
    session = Scarce(-1)
    with pytest.raises(RefusedError):
        arm(session, Asked(knots=7), Window(0, 0), True)  # type: ignore[arg-type]
    assert session.asked == [(0, 0)]


def summed(pairs: RawPairs, counts: list[int]) -> RawKnots:
    """Knots over all of `pairs`, which are the first of the sweep."""
    starts = np.cumsum([0, *counts[:-1]])
    sums = [
        np.add.reduceat(each.astype(np.uint64), starts) for each in (pairs.voltage, pairs.current)
    ]
    rest = np.asarray(counts, dtype=np.uint64)
    return RawKnots(rest, *sums, rest, rest, rest)


def test_one_wrong_code_is_found() -> None:
    """A pair that was swapped or lost on the way would pass for a measurement."""
    draw = np.random.default_rng(3)
    codes = draw.integers(0, 4096, (2, 100)).astype(np.uint16)
    knots = summed(RawPairs(0, *codes), [20, 30, 40, 10])
    (check,) = _pairs_add_up(knots, RawPairs(15, codes[0, 15:95], codes[1, 15:95]))
    assert check.holds
    assert check.found == "2 knots of the 2 within the stretch, pairs up to 95 of 100"
    codes[1, 60] ^= 1
    (check,) = _pairs_add_up(knots, RawPairs(15, codes[0, 15:95], codes[1, 15:95]))
    assert not check.holds
    assert check.found.startswith("1 knots of the 2")
    (check,) = _pairs_add_up(knots, RawPairs(95, *codes[:, :10]))
    assert not check.holds
    assert _pairs_add_up(knots, RawPairs(0, *codes[:, :0])) == []


def test_zeros_far_from_the_profile_s_are_told() -> None:
    assert _zeros(None, -23.9, 4095).holds
    assert _zeros(24.0, 0.0, 4095).found == "voltage +24.0 codes, current +0.0 codes off"
    far = _zeros(-24.1, 0.0, 4095)
    assert (far.holds, far.expected) == (False, "within 24 codes")
    assert _zeros(380.0, -380.0, 65535).holds


def test_bounces_refuse_nothing_and_are_told() -> None:
    assert _closed_for_good(0, 0) == []
    for bounces, bounce_ms, found, expected in (
        (0, 5, "without opening again", "over within 5 ms"),
        (3, 5, "opened again 3 times", "over within 5 ms"),
        (1, 0, "opened again 1 times", "a contact without bounce"),
    ):
        (check,) = _closed_for_good(bounces, bounce_ms)
        assert check.holds
        assert found in check.found
        assert expected in check.expected


def test_the_limit_is_that_of_the_wire() -> None:
    assert FullRate().pairs(PAIR_US) == catalogue.MAX_RAW_PAIRS
