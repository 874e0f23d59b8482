"""If these fail, sums overflow on the RP2040's 32-bit words and on no other rung."""

import ast
from itertools import pairwise
from pathlib import Path

import pytest
from fake_board import FakeBoard
from hypothesis import given, settings
from hypothesis import strategies as st

from kneewise.emulator.firmware import device_folder, firmware_module

module = firmware_module("tracer.capture")
SMALL = 2**30  # MicroPython's small integers end here, on 32-bit words
RAIL = 4095
LARGEST_LOW = module.SPLIT - 1


class Word(int):
    """A number that fails where it outgrows the words of the capture."""

    def _made(self, value):
        assert -SMALL <= value < SMALL, f"{value} needs more than 31 bits"
        return Word(value)

    def __add__(self, other):
        return self._made(int(self) + int(other))

    def __sub__(self, other):
        return self._made(int(self) - int(other))

    def __rsub__(self, other):
        return self._made(int(other) - int(self))

    def __mul__(self, other):
        return self._made(int(self) * int(other))

    __radd__ = __add__
    __rmul__ = __mul__


def words(values):
    return [Word(value) for value in values]


def state_for(bin_pairs: int, left: int) -> list[Word]:
    state = words([0] * module.S_WORDS)
    state[module.S_MASK] = Word(8191)
    state[module.S_BIN_PAIRS] = Word(bin_pairs)
    state[module.S_LEFT] = Word(left)
    return state


ALTERNATING = [code for pair in range(4000) for code in ((0, RAIL) if pair % 2 else (RAIL, 0))]


def test_the_worst_codes_at_the_end_of_the_largest_bin_stay_within_bounds():
    count = 4000
    before = module.MAX_BIN_PAIRS - count
    high = before * RAIL**2 // module.SPLIT
    full = [before * RAIL, before * RAIL, LARGEST_LOW, high, LARGEST_LOW, high]
    bins = words(full + [0] * 6)
    state = state_for(module.MAX_BIN_PAIRS, count)
    assert module.fold(words(ALTERNATING), bins, state, Word(count)) == count
    assert max(bins[:2]) < 2**28
    assert max(bins[2], bins[4]) < module.SPLIT
    assert state[module.S_BIN] == 1
    scatter = int(bins[2]) + (int(bins[3]) << module.SPLIT_BITS)
    # The first voltage of these is 4095, after a 0; the first current is 0, after a 0.
    assert scatter == LARGEST_LOW + (high << module.SPLIT_BITS) + count * RAIL**2


def test_two_worst_bins_merge_within_bounds():
    half = module.MAX_BIN_PAIRS // 2
    high = half * RAIL**2 // module.SPLIT
    worst = [half * RAIL, half * RAIL, LARGEST_LOW, high, LARGEST_LOW, high]
    bins = words(worst * 4)
    module.merge(bins, 4)
    assert bins[:2] == [2 * half * RAIL] * 2
    assert bins[12:] == [0] * 12
    for low in (2, 4):
        total = int(bins[low]) + (int(bins[low + 1]) << module.SPLIT_BITS)
        assert total == 2 * (LARGEST_LOW + (high << module.SPLIT_BITS))
        assert bins[low] < module.SPLIT


@settings(max_examples=100)
@given(
    st.lists(st.tuples(*[st.integers(0, RAIL)] * 2), min_size=1, max_size=60),
    st.integers(0, LARGEST_LOW),
    st.integers(0, LARGEST_LOW),
)
def test_split_words_add_up_whatever_stood_in_them(pairs, low_v, low_i):
    ring = words([code for pair in pairs for code in pair])
    bins = words([0, 0, low_v, 3, low_i, 5])
    state = state_for(4096, 4096)
    module.fold(ring, bins, state, Word(len(pairs)))
    for channel, (low, high) in enumerate(((low_v, 3), (low_i, 5))):
        codes = [0, *(pair[channel] for pair in pairs)]
        added = sum((b - a) ** 2 for a, b in pairwise(codes))
        place = 2 + 2 * channel
        total = int(bins[place]) + (int(bins[place + 1]) << module.SPLIT_BITS)
        assert total == low + (high << module.SPLIT_BITS) + added
        assert bins[channel] == sum(codes)


def test_a_slice_as_long_as_the_ring_still_has_a_mean():
    assert 16 * RAIL * FakeBoard.RING_PAIRS < SMALL


@pytest.mark.parametrize("file", ["capture.py", "knots.py", "charge.py", "interlocks.py"])
def test_the_firmware_computes_in_integers_alone(file):
    tree = ast.parse((Path(device_folder()) / "tracer" / file).read_text())
    for node in ast.walk(tree):
        assert not isinstance(node, ast.Div), f"{file} divides with a remainder of rounding"
        assert not (isinstance(node, ast.Constant) and isinstance(node.value, float)), file
        assert not (isinstance(node, ast.Name) and node.id == "float"), file
