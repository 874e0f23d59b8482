"""If these fail, pairs of a sweep are lost, counted twice or put in the wrong place."""

import folding
import numpy as np
import pytest
from folding import LAP_MARGIN, RING, THRESHOLD, capture, feed
from hypothesis import example, given, settings
from hypothesis import strategies as st

from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.capture")

# Part of a unit may still wait in the ring, and a nearly full ring counts as overtaken.
SLICES = st.lists(st.integers(0, RING - LAP_MARGIN - 17), max_size=60)


def sweep(seed: int, dark: int, bright: int) -> np.ndarray:
    """Codes of every kind: dark ones below the threshold, then any."""
    draw = np.random.default_rng(seed)
    pairs = draw.integers(0, 4096, (dark + bright, 2))
    pairs[:dark, 1] = draw.integers(0, THRESHOLD + 1, dark)
    if bright:
        pairs[dark:, 1] = np.maximum(pairs[dark:, 1], THRESHOLD + 1)
    return pairs


def check(filled, pairs: np.ndarray) -> None:
    folding.finished(filled, pairs)
    compare(filled, pairs)


def compare(filled, pairs: np.ndarray) -> None:
    start = folding.first_folded(pairs)
    if start is None:
        assert not filled.conducts()
        assert filled.pairs() == filled.used_bins() == 0
        return
    folded = pairs[start:]
    assert filled.conducts()
    assert filled.skipped == start
    assert filled.pairs() == len(folded)
    assert filled.bin_pairs() == folding.bin_pairs(len(folded))
    assert folding.bins_of(filled).tolist() == folding.bins(folded).tolist()


@settings(max_examples=150)
@given(st.integers(0, 2**32 - 1), st.integers(0, 300), st.integers(0, 3000), SLICES)
@example(1, 0, 9000, [1, 2, 3])
def test_every_pair_is_in_exactly_one_bin_however_the_arrivals_are_cut(seed, dark, bright, slices):
    pairs = sweep(seed, dark, bright)
    filled = capture()
    feed(filled, pairs, slices)
    assert filled.overruns == 0
    check(filled, pairs)


@pytest.mark.parametrize("count", [1, 1023, 1024, 1025, 2047, 2048, 4095, 4096, 4097, 8192])
def test_no_pair_goes_astray_where_the_bins_double(count):
    pairs = sweep(count, 0, count + 1)
    filled = capture()
    feed(filled, pairs, [97] * 200)
    folding.finished(filled, pairs)
    assert filled.pairs() == count
    assert filled.used_bins() == -(-count // filled.bin_pairs())
    check(filled, pairs)


def test_a_long_sweep_still_has_hundreds_of_bins():
    pairs = sweep(3, 10, 20000)
    filled = capture(ring_pairs=4096)
    feed(filled, pairs, [125] * 200)
    folding.finished(filled, pairs)
    assert filled.bin_pairs() == 32
    assert 512 <= filled.used_bins() <= 1024
    check(filled, pairs)


def test_the_count_of_written_pairs_may_wrap():
    pairs = sweep(5, 20, 600)
    filled = capture()
    start = 2**30 - 300
    filled.read = filled.written = start
    filled.control[module.C_AT] = start % RING
    for number, (v, i) in enumerate(pairs.tolist(), start=start):
        filled.ring[number % RING] = v | i << 16
        if number % 100 == 99:
            filled.drain((number + 1) % 2**30)
    filled.drain((start + len(pairs)) % 2**30)
    filled.finish((start + len(pairs)) % 2**30)
    compare(filled, pairs)


@pytest.mark.parametrize("found", [False, True])
def test_a_ring_that_was_overtaken_is_told_and_its_pairs_are_not_taken(found):
    filled = capture()
    pairs = sweep(7, 0, 40) if found else sweep(7, 40, 0)
    feed(filled, pairs, [])
    before = filled.pairs()
    filled.drain(len(pairs) + RING)
    assert filled.overruns == 1
    assert filled.pairs() == before


@pytest.mark.parametrize("late", [0, 1])
def test_a_pair_that_could_be_overwritten_while_it_is_read_counts_as_overtaken(late):
    pairs = sweep(8, 0, RING - LAP_MARGIN + late)
    filled = capture()
    feed(filled, pairs, [len(pairs)])
    assert filled.overruns == late
    if not late:
        check(filled, pairs)


@pytest.mark.parametrize("calls", range(4))
def test_bins_stay_whole_where_the_ring_is_overtaken_in_the_middle_of_a_merge(calls):
    pairs = sweep(9, 0, 1025)
    filled = capture(ring_pairs=2048)
    feed_from_all(filled, pairs)
    while filled._merged < 0:
        filled.drain(len(pairs))
    for _ in range(calls):
        filled.drain(len(pairs))
    filled.drain(len(pairs) + 2048)
    filled.finish(len(pairs) + 2048)
    assert filled.overruns == 2
    assert (filled.pairs(), filled.bin_pairs()) == (1024, 2)
    assert folding.bins_of(filled).tolist() == folding.bins(pairs[1:]).tolist()


@pytest.mark.parametrize("closing", range(12))
@pytest.mark.parametrize("border", range(1, 14))
def test_conduction_is_found_at_the_same_pair_wherever_a_slice_ends(closing, border):
    pairs = np.array([[2400, 40]] * closing + [[v, 1800] for v in range(20)])
    filled = capture()
    feed(filled, pairs, [border, 1, 1])
    folding.finished(filled, pairs)
    # The first bright pair may have had its voltage taken before the closing.
    assert filled.skipped == closing + 1
    assert filled.pairs() == 19
    assert filled.bins[module.B_VOLTAGE] == 1
    check(filled, pairs)


def test_the_jump_at_the_closing_is_no_scatter():
    pairs = np.array([[2400, 40]] * 9 + [[24, 1800]] * 30)
    filled = capture()
    feed(filled, pairs, [])
    folding.finished(filled, pairs)
    assert not folding.bins_of(filled)[:, 2:].any()


@pytest.mark.parametrize(
    ("currents", "conducts"),
    [
        ([THRESHOLD] * 9, False),
        ([THRESHOLD + 1] * 2, True),
        ([THRESHOLD + 1], False),
        ([4095, 40] * 9, False),
        ([40, 4095, 40, 40, 4095, 4095], True),
    ],
)
def test_one_noisy_pair_is_no_conduction(currents, conducts):
    pairs = np.array([[2400, current] for current in currents])
    for size in (1, 2, RING - 1):
        filled = capture()
        feed(filled, pairs, [size] * 20)
        assert filled.conducts() is conducts
        check(filled, pairs)


@settings(max_examples=25)
@given(st.integers(0, 2**32 - 1), st.lists(st.integers(1, RING - 20), min_size=1, max_size=12))
def test_the_end_rule_sees_the_means_of_what_each_call_folded(seed, slices):
    pairs = sweep(seed, 0, sum(slices))
    filled = capture(ring_pairs=4096)
    taken = 0
    for many in slices:
        before = filled.pairs()
        feed_from(filled, pairs, taken, taken + many)
        part = pairs[1 + before : 1 + filled.pairs()]
        assert filled.recent_means() is bool(len(part))
        if len(part):
            means = (16 * part.sum(axis=0) // len(part)).tolist()
            assert [filled.voltage_x16, filled.current_x16] == means
        taken += many


def feed_from(filled, pairs: np.ndarray, start: int, stop: int) -> None:
    for number in range(start, stop):
        v, i = pairs[number].tolist()
        filled.ring[number % filled.ring_pairs] = v | i << 16
    filled.drain(stop)


def test_a_capture_that_can_hold_no_more_says_so_and_keeps_what_it_has():
    filled = capture()
    pairs = sweep(9, 0, 200)
    feed(filled, pairs[:2], [])
    filled._bin_pairs = module.MAX_BIN_PAIRS
    filled._bin = module.BINS - 1
    filled._held = module.MAX_BIN_PAIRS - 32
    filled.control[module.C_UNIT] = module.UNIT_PAIRS
    feed_from(filled, pairs, 2, 100)
    assert filled.full
    assert filled.pairs() == module.BINS * module.MAX_BIN_PAIRS
    assert filled.used_bins() == module.BINS
    feed_from(filled, pairs, 100, 200)
    filled.finish(200)
    assert filled.pairs() == module.BINS * module.MAX_BIN_PAIRS


def test_a_call_is_bounded_so_that_the_pulse_is_renewed_in_between():
    """With a backlog of a whole ring in one call, the contact would open in mid-charge."""
    filled = capture(ring_pairs=4096)
    pairs = sweep(4, 0, 4000)
    feed_from_all(filled, pairs)
    turns = []
    while filled.behind() >= module.UNIT_PAIRS:
        before = filled.pairs()
        filled.drain(len(pairs))
        turns.append(filled.pairs() - before)
    assert max(turns) <= module.DRAIN_PAIRS
    assert 0 in turns  # a merge has calls of its own
    check(filled, pairs)


@pytest.mark.parametrize("bin_pairs", [1, 8, 16, 32, 64, 1024, 65536])
def test_a_call_folds_in_few_pieces_whatever_a_bin_holds(bin_pairs):
    """Each piece costs the interpreter 0.2 ms; at one piece a bin, bins of 32 fell behind."""
    filled = capture(ring_pairs=4096)
    feed_from_all(filled, sweep(4, 0, 2))
    filled._bin_pairs = bin_pairs
    filled.control[module.C_UNIT] = min(bin_pairs, module.UNIT_PAIRS)
    pieces = []

    def counted(ring, bins, control, fold=filled.fold):
        pieces.append(int(control[module.C_UNITS]))
        fold(ring, bins, control)

    filled.fold = counted
    before = filled.behind()
    filled.drain(before + module.DRAIN_PAIRS + 1)
    assert sum(pieces) * filled.control[module.C_UNIT] >= module.DRAIN_PAIRS - module.UNIT_PAIRS
    assert len(pieces) <= 3


def feed_from_all(filled, pairs: np.ndarray) -> None:
    for number, (v, i) in enumerate(pairs.tolist()):
        filled.ring[number] = v | i << 16
    filled.drain(len(pairs))


def test_the_last_sweep_is_forgotten():
    filled = capture()
    feed(filled, sweep(1, 3, 3000), [])
    filled.drain(10**6)
    filled.finish(10**6)
    filled.begin(THRESHOLD)
    assert (filled.overruns, filled.skipped, filled.pairs(), filled.full) == (0, 0, 0, False)
    pairs = sweep(2, 3, 50)
    feed(filled, pairs, [])
    check(filled, pairs)
