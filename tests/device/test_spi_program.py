"""If these fail, two SPI converters are read at the wrong instant, too fast for them, or with bits
in the wrong place: the curve is wrong, and nothing says so.
"""

from __future__ import annotations

import random
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pio_walk import SYNC_CYCLES, Walk, spi_program, timing

MHZ = 125
SETTINGS = [
    (2, 20_000, 500),
    (4, 20_000, 700),
    (4, 60_000, 10),
    (5, 12_500, 1500),
    (12, 2_000, 800),
    (40, 1_000, 2_000),
    (97, 20_000, 710),
    (100, 400, 50_000),
]
ANY_PLAN = st.tuples(st.integers(2, 100), st.integers(100, 60_000), st.integers(1, 60_000))


def shortest_us(clock_khz: int, convert_ns: int) -> float:
    """The formula of device/README.md for a clock of whole system cycles, PIO undivided."""
    bit = max(-(-1000 * MHZ // clock_khz), 4)
    select = max(-(-convert_ns * MHZ // 1000), 104)
    return (select + 16 * bit + (bit + 1) // 2 + 2) / MHZ


def some_words(count: int) -> list[tuple[int, int]]:
    made = random.Random(count)
    edge = [(0, 0), (65535, 0), (0, 65535), (65535, 65535), (0x8000, 1), (1, 0x8000)]
    edge += [(1 << bit, 0) for bit in range(16)] + [(0, 1 << bit) for bit in range(16)]
    return edge + [(made.randrange(65536), made.randrange(65536)) for _ in range(count)]


@pytest.mark.parametrize("setting", SETTINGS)
def test_every_bit_arrives_in_its_place(setting: tuple[int, int, int]) -> None:
    plan = timing.plan(MHZ, *setting)
    divider, high, low, _, _ = plan
    words = some_words(300)
    slowest = (high + low) * divider - SYNC_CYCLES  # what a converter may take at most
    walk = Walk(plan, words, valid=slowest).run()
    # The last pair that was sampled is sorted after the next sampling, which never came.
    assert walk.pushed == [v | i << 16 for v, i in words[: len(walk.pushed)]]
    assert len(walk.pushed) == len(words) - 1


def test_a_converter_slower_than_stated_is_read_wrong() -> None:
    """The number that device/README.md gives is the last good one."""
    plan = timing.plan(MHZ, 4, 20_000, 700)
    slowest = (plan[1] + plan[2]) * plan[0] - SYNC_CYCLES
    words = some_words(10)
    walk = Walk(plan, words, valid=slowest + 1).run()
    assert walk.pushed[6] != words[6][0] | words[6][1] << 16


@given(ANY_PLAN)
def test_a_plan_keeps_all_its_numbers_or_is_refused(numbers: tuple[int, int, int]) -> None:
    """Pair period exact; conversion, bit clock and quiet no shorter than asked for."""
    pair_us, clock_khz, convert_ns = numbers
    try:
        plan = timing.plan(MHZ, *numbers)
    except ValueError:
        return
    divider, _, low, _, _ = plan
    words = [(0x5555, 0xAAAA)] * 4
    walk = Walk(plan, words, valid=1).run()
    assert walk.rises == [MHZ * pair_us * number for number in range(4)]
    for rise, fall in zip(walk.rises, walk.falls, strict=False):
        assert 1000 * (fall - rise) >= convert_ns * MHZ
    assert len(walk.clock_falls) == len(walk.clock_rises) == 16 * 4
    for pair, fall in enumerate(walk.falls[:3]):
        rises = walk.clock_rises[16 * pair : 16 * pair + 16]
        falls = walk.clock_falls[16 * pair : 16 * pair + 16]
        assert rises[0] > fall
        periods = {after - before for before, after in pairwise([fall, *falls])}
        assert len(periods) == 1
        assert periods.pop() * clock_khz >= 1000 * MHZ
        assert walk.rises[pair + 1] - falls[-1] >= (low + 2) * divider
    assert walk.pushed == [0xAAAA5555] * 3


@given(ANY_PLAN)
def test_what_the_formula_allows_is_not_refused(numbers: tuple[int, int, int]) -> None:
    pair_us, clock_khz, convert_ns = numbers
    needed_us = shortest_us(clock_khz, convert_ns)
    if pair_us < needed_us:
        with pytest.raises(ValueError, match=r"too short|no PIO clock"):
            timing.plan(MHZ, *numbers)
    elif pair_us <= 4 or pair_us >= 3 * needed_us:
        timing.plan(MHZ, *numbers)


def test_numbers_that_cannot_be_kept_say_so() -> None:
    with pytest.raises(ValueError, match="pair_us is too short for conversion and 16 bits"):
        timing.plan(MHZ, 2, 20_000, 1200)
    with pytest.raises(ValueError, match="SPI clock is 0"):
        timing.plan(MHZ, 4, 0, 700)
    with pytest.raises(ValueError, match="no PIO clock fits these SPI numbers"):
        timing.plan(MHZ, 100, 10, 700)


def test_the_program_fits_and_its_waits_are_exact() -> None:
    assert len(spi_program(timing.plan(MHZ, 4, 20_000, 700)).steps) == 25
    for wait in range(timing.SHORTEST_WAIT, timing.LONGEST_WAIT + 1):
        first, rounds, each = timing.loop(wait)
        assert 0 <= first <= 15
        assert 0 <= rounds <= 31
        assert 0 <= each <= 15
        assert 1 + first + (rounds + 1) * (each + 1) == wait
