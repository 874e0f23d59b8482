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


def control_for(unit: int, units: int, last: int = 0) -> list[Word]:
    control = words([0] * module.C_WORDS)
    control[module.C_UNIT] = Word(unit)
    control[module.C_UNITS] = Word(units)
    control[module.C_LAST] = Word(last)
    return control


def total(bins, low: int) -> int:
    return int(bins[low]) + (int(bins[low + 1]) << module.SPLIT_BITS)


def test_the_worst_codes_in_a_unit_stay_within_bounds():
    pairs = [RAIL << 16, RAIL] * 8
    bins = words([0] * 6)
    module.fold_units(words(pairs), bins, control_for(16, 1, RAIL))
    assert bins[:2] == [8 * RAIL] * 2
    assert max(bins[:2]) < 2**16
    assert bins[2:] == [16 * RAIL**2, 0, 16 * RAIL**2, 0]
    assert max(bins[2], bins[4]) < 2**28


def test_the_worst_units_at_the_end_of_the_largest_bin_stay_within_bounds():
    count = 4095
    before = module.MAX_BIN_PAIRS - 16 * count
    high = before * RAIL**2 // module.SPLIT
    bins = words([before * RAIL, before * RAIL, LARGEST_LOW, high, LARGEST_LOW, high])
    unit = [16 * RAIL, 16 * RAIL, 16 * RAIL**2, 0, 16 * RAIL**2, 0]
    control = control_for(16, count)
    control[module.C_HELD] = Word(1)
    control[module.C_BIN_UNITS] = Word(module.MAX_BIN_PAIRS // 16)
    module.add_units(bins, words(unit * count), control)
    assert max(bins[:2]) < 2**28
    assert max(bins[2], bins[4]) < module.SPLIT
    wanted = LARGEST_LOW + (high << module.SPLIT_BITS) + count * 16 * RAIL**2
    assert total(bins, 2) == total(bins, 4) == wanted


def test_two_worst_bins_merge_within_bounds():
    half = module.MAX_BIN_PAIRS // 2
    high = half * RAIL**2 // module.SPLIT
    worst = [half * RAIL, half * RAIL, LARGEST_LOW, high, LARGEST_LOW, high]
    bins = words(worst * 4)
    module.merge(bins, 0, 2)
    for place in (0, 6):
        assert bins[place : place + 2] == [2 * half * RAIL] * 2
        for low in (place + 2, place + 4):
            assert total(bins, low) == 2 * (LARGEST_LOW + (high << module.SPLIT_BITS))
            assert bins[low] < module.SPLIT


def test_the_sums_of_a_whole_call_stay_within_bounds():
    units = module.DRAIN_PAIRS
    control = control_for(1, units)
    module.add_up(words([RAIL] * 6 * units), control)
    assert control[module.C_VOLTAGE] == control[module.C_CURRENT] == units * RAIL


@settings(max_examples=100)
@given(
    st.lists(st.tuples(*[st.integers(0, RAIL)] * 2), min_size=1, max_size=16),
    st.integers(0, LARGEST_LOW),
    st.integers(0, LARGEST_LOW),
)
def test_split_words_add_up_whatever_stood_in_them(pairs, low_v, low_i):
    unit = words([0] * 6)
    module.fold_units([Word(v | i << 16) for v, i in pairs], unit, control_for(len(pairs), 1))
    bins = words([0, 0, low_v, 3, low_i, 5])
    control = control_for(16, 1)
    control[module.C_HELD] = Word(1)
    control[module.C_BIN_UNITS] = Word(4)
    module.add_units(bins, unit, control)
    for channel, (low, high) in enumerate(((low_v, 3), (low_i, 5))):
        codes = [0, *(pair[channel] for pair in pairs)]
        added = sum((b - a) ** 2 for a, b in pairwise(codes))
        assert total(bins, 2 + 2 * channel) == low + (high << module.SPLIT_BITS) + added
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
