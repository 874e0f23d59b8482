"""If these fail, sums overflow on the RP2040's 32-bit words and on no other rung."""

import ast
from pathlib import Path

import folding
import narrow
import numpy as np
import pytest
from fake_board import Buffers, FakeBoard
from folding import BIN_WORDS, THRESHOLD, WORK_WORDS, Placed, module
from hypothesis import Phase, given, settings
from hypothesis import strategies as st
from narrow import Both, Bytes, Halves, OutgrownError, Packed, SmallWord, Wide, Word, Words

from kneewire.guards import BOUNDS
from kneewise.emulator.firmware import device_folder, firmware_module

memory = firmware_module("tracer.memory")
# Pairs in a bin and bits of a code: every layout that a capture goes through.
SIZES = [(1 << n, 12) for n in range(16) if n != 5] + [(1 << n, 16) for n in range(16) if n != 1]


class Narrow(Buffers):
    """The firmware's buffers, of numbers that fail where they outgrow them."""

    def __init__(self, wide: bool = True):
        self.bins = Wide([0] * BIN_WORDS) if wide else Packed([0] * BIN_WORDS)
        self.control = Words([0] * memory.CONTROL_WORDS)
        self.body = Bytes([0] * memory.MAX_FRAME)
        self.cuts = Halves([0] * (memory.MAX_KNOTS + 1))
        self.trial = Halves([0] * (memory.MAX_KNOTS + 1))
        self.placing = Words([0] * memory.PLACING_WORDS)


def capture(code_bits: int, ring_pairs: int = 1024, **begin):
    ring = Packed([0] * ring_pairs)
    made = module.Capture(ring, ring_pairs, Narrow(), code_bits)
    made.begin(THRESHOLD, **begin)
    return made


def holding(rows: np.ndarray, size: int, code_bits: int, rest: int = 0):
    """A capture of full bins of these sums, and one of `rest` pairs."""
    whole = len(rows) - (rest > 0)
    plain = folding.holding(rows, size, whole * size + rest, code_bits)
    made = capture(code_bits)
    kind = Word if plain.wide else Both
    made.bins[: len(plain.bins)] = map(kind, plain.bins)
    made.control[:] = list(plain.control)
    made.wide, made._pairs, made._bins = plain.wide, plain._pairs, plain._bins
    return made


class Worst:
    """Sums of bins at the ends of what there may be."""

    @staticmethod
    def rows(kind: str, count: int, most: int, draw: np.random.Generator) -> np.ndarray:
        at = np.arange(count)
        one = {
            "rails": lambda: np.full(count, most),
            "zeros": lambda: np.zeros(count, int),
            "by turns": lambda: most * (at & 1),
            "by fours": lambda: most * (at >> 2 & 1),
            "one up": lambda: most * (at == count // 3),
            "one down": lambda: most * (at != count // 3),
            "up": lambda: most * (at > count // 2),
            "down": lambda: most * (at < count // 2),
            "ramp": lambda: most * at // count,
            "noise": lambda: draw.integers(0, most + 1, count),
            "rails at random": lambda: most * draw.integers(0, 2, count),
            "low noise": lambda: draw.integers(0, most // 100 + 2, count),
        }
        return one[kind]()


KINDS = ["rails", "zeros", "by turns", "by fours", "one up", "one down", "up", "down", "ramp"]
KINDS += ["noise", "rails at random", "low noise"]


def both(kinds: tuple[str, str], count: int, most: int, seed: int) -> np.ndarray:
    draw = np.random.default_rng(seed)
    return np.stack([Worst.rows(kind, count, most, draw) for kind in kinds], axis=1)


# -- the numbers themselves ----------------------------------------------------------------


@pytest.mark.parametrize(
    "outgrown",
    [
        lambda w: w + 1,
        lambda w: 1 + w,
        lambda w: -2 - w,
        lambda w: w * 2,
        lambda w: w << 1,
        lambda w: 1 << (w >> 25) >> 1 << 26,
        lambda w: (w - 1) * 3 // 3,
        lambda w: -(-1 - w),
        lambda w: Both(0xFFFF) + Both(1),
        lambda w: Both(0xFFFF << 16) + Both(1 << 16),
        lambda w: Halves([0]).__setitem__(0, 1 << 16),
        lambda w: Packed([0]).__setitem__(0, 1 << 32),
        lambda w: w >> 32,
    ],
)
def test_a_number_that_outgrows_its_word_is_found(outgrown):
    with pytest.raises(OutgrownError):
        outgrown(Word(2**31 - 1))


def test_numbers_behave_as_the_cores_do():
    word = Word(-5)
    assert [word // 2, word % 3, word >> 1, word & 7, -word, abs(word)] == [-3, 1, -3, 3, 5, 5]
    assert type(7 - word) is type(word << 3) is type(1 << Word(3)) is type(9 // Word(2)) is Word
    packed = Both(0xFFFE_0003)
    assert (packed >> 16, (packed >> 16) & 0xFFFF, packed & 0xFFFF) == (-2, 0xFFFE, 3)


# -- while a capture runs ------------------------------------------------------------------


@pytest.mark.parametrize("code_bits", [12, 16])
@pytest.mark.parametrize("kind", ["rails", "noise"])
def test_folding_and_merging_stay_within_a_word(code_bits, kind):
    rail = (1 << code_bits) - 1
    count = 140_000 if code_bits == 12 else 35_000
    pairs = both((kind, kind), count, rail, 1)
    pairs[:, 1] |= THRESHOLD + 1
    pairs[30:33, 1] = 0
    made = capture(code_bits, 4096, bounce_pairs=200, raw=None)
    words = folding.as_words(pairs)
    for written in range(0, count, 3000):
        upto = min(written + 3000, count)
        for number in range(written, upto):
            made.ring[number & 4095] = words[number]
        made.drain(Word(upto))
        made.recent_means()
        while made.behind() >= 16:
            made.drain(Word(upto))
    made.finish(Word(count))
    assert made.wide
    assert made.bounces == 1
    assert folding.bins_of(made).tolist() == folding.bins(pairs[34:], code_bits).tolist()


@pytest.mark.parametrize(("size", "code_bits"), SIZES)
def test_the_worst_bins_are_filled_and_merged_within_a_word(size, code_bits):
    rail = (1 << code_bits) - 1
    wide = size << code_bits > 1 << 16
    count = BIN_WORDS // 2 if wide else BIN_WORDS
    made = holding(np.full((count, 2), size * rail), size, code_bits)
    # The last bin has room for one pair, then the bins are merged.
    last = size * rail - rail
    if wide:
        made.bins[2 * count - 2 :] = [Word(last), Word(last)]
    else:
        made.bins[count - 1] = Both(last | last << 16)
    made.control[module.C_BIN] = count - 1
    made.control[module.C_LEFT] = 1
    made._pairs -= 1
    made.ring[0] = made.ring[1] = made.ring[2] = rail | rail << 16
    made.drain(Word(1))
    assert folding.bins_of(made).tolist() == [[size * rail] * 2] * count
    made.drain(Word(3))
    made.drain(Word(3))
    assert made.full is (size == module.MAX_BIN_PAIRS)
    if not made.full:
        merged = int(made.bin_pairs()) // size
        wanted = [[merged * size * rail] * 2] * (count // merged)
        assert folding.bins_of(made).tolist()[: count // merged] == wanted


def test_what_the_loop_computes_while_charging_needs_no_object():
    """Between closing and opening the heap is locked: a sum beyond 30 bits ends the charge."""
    made = capture(16, 4096)
    made.control = Words([0] * memory.CONTROL_WORDS)
    made.control.kind = SmallWord.of
    rail = 65535
    made.ring[:] = [rail << 16 | rail] * 4096
    made._recent = SmallWord(2048)
    made.control[module.C_AT] = 4096
    module.add_up(made.ring, made.control, module.MEAN_PAIRS)
    count = SmallWord(module.MEAN_PAIRS)
    for channel in (module.C_VOLTAGE, module.C_CURRENT):
        assert SmallWord(16) * SmallWord(made.control[channel]) // count == 16 * rail
    assert module.MAX_BIN_PAIRS * BIN_WORDS // 2 < narrow.SMALL  # room of all bins, in pairs
    assert 16 * rail * FakeBoard.RING_PAIRS // 16 < narrow.SMALL


# -- once it is over -----------------------------------------------------------------------


@pytest.mark.parametrize(("size", "code_bits"), SIZES)
@pytest.mark.parametrize("knots", [16, 50])
def test_placing_stays_within_a_word_at_every_size_of_bins(size, code_bits, knots):
    wide = size << code_bits > 1 << 16
    most = size * ((1 << code_bits) - 1)
    count = BIN_WORDS // 2 if wide else BIN_WORDS
    number = size.bit_length() + knots + code_bits
    kinds = KINDS[number % 9], KINDS[(number * 5 + 3) % 12]
    check(both(kinds, count, most, number), size, code_bits, knots, ZEROS[number % 4])


ZEROS = [(0, 0), (24 * 16, 40 * 16), (65535, 65535), (0, 65535)]


@settings(max_examples=20, phases=[Phase.explicit, Phase.generate])
@given(
    st.sampled_from(SIZES),
    st.tuples(st.sampled_from(KINDS), st.sampled_from(KINDS)),
    st.integers(1, BIN_WORDS),
    st.integers(16, 100),
    st.sampled_from(ZEROS),
    st.integers(0, 2**32 - 1),
    st.integers(0, 32767),
)
def test_placing_stays_within_a_word_whatever_was_measured(
    layout, kinds, count, knots, zeros, seed, rest
):
    size, code_bits = layout
    wide = size << code_bits > 1 << 16
    most = size * ((1 << code_bits) - 1)
    count = (count + 1) // 2 if wide else count
    check(both(kinds, count, most, seed), size, code_bits, knots, zeros, rest % size)


@pytest.mark.parametrize("kinds", [("by turns", "rails at random")])
def test_placing_the_most_knots_stays_within_a_word(kinds):
    check(both(kinds, BIN_WORDS, 65535, 1), 1, 16, 512, (0, 0))


def check(rows, size, code_bits, knots, zeros, rest=0) -> None:
    """Place and write with words that fail; the same comes out as with CPython's integers."""
    if rest:
        share = (rows[-1] * rest // size)[None, :]
        rows = np.concatenate([rows, share])[-(BIN_WORDS // 2 if rest else BIN_WORDS) :]
    made = holding(rows, size, code_bits, rest)
    plain = folding.holding(rows, size, made.pairs(), code_bits)
    placed = Placed(plain, knots, zeros=zeros)
    buffers = Narrow()
    found = Placed(made, knots, buffers=buffers, work=Words([0] * WORK_WORDS), zeros=zeros)
    assert found.cuts == placed.cuts
    assert found.records == placed.records


def test_the_longest_sweep_has_a_time_within_a_word():
    """Twice its microseconds are the largest number on the way to a knot's time."""
    closed_us = 1000 * {name: most for name, _, most in BOUNDS}["closed_limit_ms"]
    pair_us = 255
    size = 512
    count = closed_us // pair_us // size
    made = holding(np.zeros((count, 2), int), size, 16)
    buffers = Narrow()
    Placed(made, 96, buffers=buffers, work=Words([0] * WORK_WORDS))
    folding.write(made, buffers, 96, pair_us)


@pytest.mark.parametrize(
    "file",
    [
        *("capture.py", "plane.py", "spacing.py", "knots.py", "records.py", "held.py"),
        *("charge.py", "contact.py", "ending.py", "interlocks.py", "spi_timing.py"),
        *("bleeding.py", "heat.py", "profile.py", "sequencer.py"),
    ],
)
def test_the_firmware_computes_in_integers_alone(file):
    tree = ast.parse((Path(device_folder()) / "tracer" / file).read_text())
    for node in ast.walk(tree):
        assert not isinstance(node, ast.Div), f"{file} divides with a remainder of rounding"
        assert not (isinstance(node, ast.Constant) and isinstance(node.value, float)), file
        assert not (isinstance(node, ast.Name) and node.id == "float"), file
