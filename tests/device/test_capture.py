"""If these fail, pairs of a sweep are lost, counted twice or put in the wrong place."""

import folding
import numpy as np
import pytest
from folding import BIN_WORDS, LAP_MARGIN, RING, THRESHOLD, capture, feed
from hypothesis import example, given, settings
from hypothesis import strategies as st

from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.capture")

# What `feed` leaves waiting, and a nearly full ring counts as overtaken.
SLICES = st.lists(st.integers(0, RING - LAP_MARGIN - 17), max_size=60)
CODE_BITS = st.sampled_from([12, 16])


def sweep(seed: int, dark: int, bright: int, code_bits: int = 12) -> np.ndarray:
    """Codes of every kind: dark ones below the threshold, then any."""
    draw = np.random.default_rng(seed)
    pairs = draw.integers(0, 1 << code_bits, (dark + bright, 2))
    pairs[:dark, 1] = draw.integers(0, THRESHOLD + 1, dark)
    if bright:
        pairs[dark:, 1] = np.maximum(pairs[dark:, 1], THRESHOLD + 1)
    return pairs


def check(filled, pairs: np.ndarray, code_bits: int = 12) -> None:
    folding.finished(filled, pairs)
    compare(filled, pairs, code_bits)


def compare(filled, pairs: np.ndarray, code_bits: int = 12) -> None:
    start = folding.first_folded(pairs)
    if start is None:
        assert not filled.conducts()
        assert filled.pairs() == filled.full_bins() == 0
        return
    folded = pairs[start:]
    assert filled.conducts()
    assert filled.skipped == start
    assert filled.pairs() == len(folded)
    size, words = folding.layout(len(folded), code_bits)
    assert (filled.bin_pairs(), filled.wide) == (size, words == 2)
    assert filled.full_bins() == len(folded) // size
    assert (folding.bins_of(filled) == folding.bins(folded, code_bits)).all()


@settings(max_examples=150)
@given(st.integers(0, 2**32 - 1), st.integers(0, 300), st.integers(0, 3000), SLICES, CODE_BITS)
@example(1, 0, 9000, [1, 2, 3], 12)
@example(1, 0, 9000, [1, 2, 3], 16)
def test_every_pair_is_in_exactly_one_bin_however_the_arrivals_are_cut(
    seed, dark, bright, slices, code_bits
):
    pairs = sweep(seed, dark, bright, code_bits)
    filled = capture(code_bits=code_bits)
    feed(filled, pairs, slices)
    assert filled.overruns == 0
    check(filled, pairs, code_bits)


@settings(max_examples=60)
@given(st.integers(0, 2**32 - 1), st.integers(1, 200_000), CODE_BITS)
@example(2, 200_000, 12)
@example(2, 200_000, 16)
def test_no_pair_goes_astray_in_a_long_sweep_whose_arrivals_are_cut_at_random(
    seed, count, code_bits
):
    """Bins double several times and become two words."""
    pairs = sweep(seed, seed % 50, count, code_bits)
    filled = capture(2048, code_bits=code_bits)
    draw = np.random.default_rng(seed)
    feed(filled, pairs, iter(lambda: int(draw.integers(0, 1900)), None))
    assert filled.overruns == 0
    check(filled, pairs, code_bits)


WORST = {12: 16 * BIN_WORDS, 16: BIN_WORDS}  # pairs in the largest bins of one word


@pytest.mark.parametrize("code_bits", [12, 16])
@pytest.mark.parametrize("factor", [1, 2, 8, 16, 32, 64])
@pytest.mark.parametrize("more", [-1, 0, 1])
def test_no_pair_goes_astray_where_the_bins_double(code_bits, factor, more):
    count = factor * BIN_WORDS + more
    pairs = np.full((count + 1, 2), (1 << code_bits) - 1)
    pairs[::3, 0] = np.arange(0, count + 1, 3) % (1 << code_bits)
    filled = capture(4096, code_bits=code_bits)
    feed(filled, pairs, [97] * 200)
    check(filled, pairs, code_bits)
    assert filled.wide is (count > WORST[code_bits])


def test_a_long_sweep_still_has_a_thousand_bins():
    for count in (BIN_WORDS, 9000, 40000, 66000, 131000, 200_000):
        pairs = sweep(3, 10, count)
        filled = capture(4096)
        feed(filled, pairs, [125] * 200)
        folding.finished(filled, pairs)
        assert 1000 <= filled.full_bins() <= BIN_WORDS
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
    feed(filled, pairs)
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


def test_bins_stay_whole_where_the_ring_is_overtaken_right_behind_a_merge():
    pairs = sweep(9, 0, BIN_WORDS + 40)
    filled = capture(8192)
    put_all(filled, pairs)
    while filled.bin_pairs() == 1:
        filled.drain(len(pairs))
    filled.drain(len(pairs) + 8192)
    filled.finish(len(pairs) + 8192)
    assert filled.overruns == 2
    assert (filled.pairs(), filled.bin_pairs()) == (BIN_WORDS, 2)
    merged = pairs[1 : BIN_WORDS + 1].reshape(-1, 2, 2).sum(axis=1)
    assert folding.bins_of(filled).tolist() == merged.tolist()


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
    assert filled.bins[0] == 1 | 1800 << 16
    check(filled, pairs)


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
@given(
    st.integers(0, 2**32 - 1),
    st.lists(st.integers(1, RING - 20), min_size=1, max_size=12),
    CODE_BITS,
)
def test_the_end_rule_sees_the_means_of_the_newest_that_each_call_folded(seed, slices, code_bits):
    pairs = sweep(seed, 0, sum(slices), code_bits)
    filled = capture(4096, code_bits=code_bits)
    taken = 0
    for many in slices:
        before = filled.pairs()
        put_some(filled, pairs, taken, taken + many)
        part = pairs[1 + before : 1 + filled.pairs()][-module.MEAN_PAIRS :]
        assert filled.recent_means() is bool(len(part))
        if len(part):
            means = (16 * part.sum(axis=0) // len(part)).tolist()
            assert [filled.voltage_x16, filled.current_x16] == means
        taken += many


def put_some(filled, pairs: np.ndarray, start: int, stop: int) -> None:
    folding.put(filled, folding.as_words(pairs), start, stop)
    filled.drain(stop)


def put_all(filled, pairs: np.ndarray) -> None:
    put_some(filled, pairs, 0, len(pairs))


@pytest.mark.parametrize("code_bits", [12, 16])
def test_a_capture_that_can_hold_no_more_says_so_and_keeps_what_it_has(code_bits):
    size, held = module.MAX_BIN_PAIRS, BIN_WORDS // 2
    count = size * held - 32
    rows = np.full((held, 2), size * ((1 << code_bits) - 1))
    filled = folding.holding(rows, size, count, code_bits)
    pairs = sweep(9, 0, 200, code_bits)
    put_some(filled, pairs, 0, 32)
    assert not filled.full
    assert (filled.pairs(), filled.full_bins()) == (size * held, held)
    last = rows[-1] + pairs[:32].sum(axis=0)
    assert folding.bins_of(filled)[-1].tolist() == last.tolist()
    before = list(filled.bins)
    put_some(filled, pairs, 32, 200)
    filled.finish(200)
    assert filled.full
    assert filled.pairs() == size * held
    assert list(filled.bins) == before


def test_a_call_is_bounded_so_that_the_pulse_is_renewed_in_between():
    """With a backlog of a whole ring in one call, the contact would open in mid-charge."""
    filled = capture(8192)
    pairs = sweep(4, 0, 8000)
    put_all(filled, pairs)
    turns = []
    while filled.behind():
        before = filled.pairs(), filled.bin_pairs()
        filled.drain(len(pairs))
        turns.append((filled.pairs() - before[0], filled.bin_pairs() > before[1]))
    assert max(folded for folded, _ in turns) <= module.DRAIN_PAIRS
    assert [merged for _, merged in turns].count(True) == 1
    assert len(turns) <= 2 + -(-8000 // module.DRAIN_PAIRS)
    check(filled, pairs)


@pytest.mark.parametrize(("size", "code_bits"), [(1, 12), (2, 12), (16, 12), (64, 12), (4, 16)])
def test_a_call_folds_in_few_pieces_whatever_a_bin_holds(size, code_bits, monkeypatch):
    """Each piece costs the interpreter 0.2 ms; at one piece a bin, bins of 32 fell behind."""
    filled = folding.holding(np.zeros((100, 2), int), size, 100 * size, code_bits)
    pieces = []
    name = "fold_wide" if filled.wide else "fold"
    folds = getattr(module, name)

    def counted(ring, bins, control):
        pieces.append(int(control[module.C_COUNT]))
        folds(ring, bins, control)

    monkeypatch.setattr(module, name, counted)
    filled.ring = folding.capture(4096).ring
    filled.ring_pairs = 4096
    filled.control[module.C_MASK] = 4095
    filled.read = 3000
    filled.control[module.C_AT] = 3000
    filled.drain(3000 + module.DRAIN_PAIRS + 1)
    assert sum(pieces) == module.DRAIN_PAIRS
    assert len(pieces) == 2  # parted by the ring's end


def test_the_last_sweep_is_forgotten():
    filled = capture(bounce_pairs=100, raw=bytearray(400), raw_first=3)
    feed(filled, sweep(1, 3, 70_000))
    filled.drain(10**6)
    filled.finish(10**6)
    filled.begin(THRESHOLD)
    told = (filled.overruns, filled.skipped, filled.pairs(), filled.bounces, filled.raw_pairs())
    assert told == (0, 0, 0, 0, 0)
    assert (filled.full, filled.wide, filled.raw) == (False, False, None)
    pairs = sweep(2, 3, 50)
    pairs[20:30, 1] = 0
    feed(filled, pairs)
    check(filled, pairs)
