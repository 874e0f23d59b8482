"""If these fail, a curve begins with the sparks of a bouncing contact, or a raw window holds other
pairs than the ones asked for."""

from array import array

import folding
import numpy as np
import pytest
from folding import BIN_WORDS, LAP_MARGIN, RING, THRESHOLD, capture, feed
from hypothesis import example, given, settings
from hypothesis import strategies as st
from test_capture import SLICES

WINDOW = 100


def contact(*runs: int, seed: int = 1) -> np.ndarray:
    """Pairs of a contact that is open and closed by turns, so many pairs each, open first."""
    draw = np.random.default_rng(seed)
    pairs = draw.integers(THRESHOLD + 1, 4096, (sum(runs), 2))
    at = 0
    for number, run in enumerate(runs):
        if number % 2 == 0:
            pairs[at : at + run, 1] = draw.integers(0, THRESHOLD + 1, run)
        at += run
    return pairs


def check(filled, pairs: np.ndarray, window: int) -> None:
    folding.finished(filled, pairs)
    start, bounces = folding.after_bounces(pairs, window)
    assert filled.bounces == bounces
    assert filled.conducts() is (start is not None)
    if start is None:
        assert filled.pairs() == 0
        assert filled.skipped == len(pairs) - 1  # the last waits for its successor
        return
    assert filled.skipped == start
    assert filled.pairs() == len(pairs) - start
    assert folding.bins_of(filled).tolist() == folding.bins(pairs[start:]).tolist()


# Runs of pairs, and where the curve begins and how many bounces there are with a window of 100.
CASES = {
    "no bounce": ((5, 200), 6, 0),
    "one": ((5, 20, 4, 200), 30, 1),
    "several": ((5, 9, 3, 11, 2, 7, 6, 300), 44, 3),
    "a single low pair is none": ((5, 20, 1, 200), 6, 0),
    "single low pairs by turns": ((5, *(2, 1) * 9, 200), 6, 0),
    "two low pairs are one": ((5, 20, 2, 200), 28, 1),
    "too short a closing is none, and open": ((5, 20, 2, 1, 2, 200), 31, 1),
    "the second low pair is the window's last": ((5, 99, 9, 200), 114, 1),
    "the second low pair is behind the window": ((5, 100, 9, 200), 6, 0),
    "the window is over after the bounce": ((5, 97, 9, 200, 9, 200), 112, 1),
    "what conducted before counts": ((5, 60, 9, 60, 9, 200), 75, 1),
    "an opening in what is left": ((5, 60, 9, 30, 9, 200), 114, 2),
    "for good": ((5, 20, 80), None, 1),
}


@pytest.mark.parametrize("case", CASES)
@pytest.mark.parametrize("slices", [[], [1] * 150, [2] * 90, [7] * 30, [31, 1, 2]])
@pytest.mark.clause("K4")
def test_the_curve_begins_behind_the_last_closing(case, slices):
    runs, start, bounces = CASES[case]
    pairs = contact(*runs)
    assert folding.after_bounces(pairs, WINDOW) == (start, bounces)
    filled = capture(bounce_pairs=WINDOW)
    feed(filled, pairs, slices)
    check(filled, pairs, WINDOW)


@pytest.mark.parametrize("border", range(20, 40))
@pytest.mark.parametrize("opening", [1, 2, 3])
def test_an_opening_is_found_wherever_a_slice_ends(border, opening):
    pairs = contact(5, 22, opening, 60)
    filled = capture(bounce_pairs=WINDOW)
    feed(filled, pairs, [border, 1, 1, 1])
    check(filled, pairs, WINDOW)
    assert filled.bounces == (opening > 1)


@pytest.mark.parametrize("dark", range(RING - 34, RING - 18))
def test_an_opening_is_found_across_the_rings_end(dark):
    pairs = contact(dark, 22, 3, 60)
    filled = capture(bounce_pairs=WINDOW)
    feed(filled, pairs, [50] * 4)
    check(filled, pairs, WINDOW)
    assert filled.bounces == 1


def test_without_a_window_nothing_is_cut():
    pairs = contact(5, 9, 3, 11, 2, 7, 6, 300)
    filled = capture()
    feed(filled, pairs)
    folding.finished(filled, pairs)
    assert (filled.bounces, filled.skipped) == (0, 6)
    assert folding.bins_of(filled).tolist() == folding.bins(pairs[6:]).tolist()


def test_a_bounce_in_the_last_slice_leaves_no_pair_between_skipped_and_folded():
    """A charge that is aborted in its first milliseconds."""
    pairs = contact(5, 9, 3, 20)
    filled = capture(bounce_pairs=WINDOW)
    folding.put(filled, folding.as_words(pairs), 0, len(pairs))
    filled.drain(len(pairs))  # the only one
    check(filled, pairs, WINDOW)
    assert (filled.skipped, filled.pairs()) == (18, 19)


RUNS = st.lists(st.integers(1, 40), min_size=2, max_size=30)


@settings(max_examples=200)
@given(RUNS, st.integers(0, 400), SLICES, st.integers(0, 2**32 - 1))
@example([3, 5, 2, 40], 8, [1] * 50, 1)
def test_every_pair_is_skipped_or_in_the_curve_whatever_the_contact_does(
    runs, window, slices, seed
):
    pairs = contact(*runs, 3, 90, seed=seed)
    filled = capture(bounce_pairs=window)
    feed(filled, pairs, slices)
    check(filled, pairs, window)


def test_a_bounce_forgets_bins_that_have_been_merged():
    pairs = contact(5, 3 * BIN_WORDS, 3, 9000)
    filled = capture(4096, bounce_pairs=4 * BIN_WORDS)
    feed(filled, pairs, [900] * 100)
    check(filled, pairs, 4 * BIN_WORDS)
    assert filled.bounces == 1


# -- raw pairs -----------------------------------------------------------------------------


def kept(filled, raw: bytearray) -> list[int]:
    return list(array("I", bytes(raw)))[: filled.raw_pairs()]


def wanted(pairs: np.ndarray, start: int, first: int, room: int) -> list[int]:
    return folding.as_words(pairs)[start + first : start + first + room].tolist()


@settings(max_examples=200)
@given(
    st.integers(2, 3000),
    st.integers(0, 3300),
    st.integers(1, 900),
    SLICES,
    st.sampled_from([0, 300]),
    st.integers(0, 2**32 - 1),
)
@example(2000, 0, 500, [], 0, 1)
@example(2000, 1990, 500, [], 0, 1)
@example(2000, 2000, 500, [], 0, 1)
@example(2000, 200, 255, [1] * 999, 300, 1)
@pytest.mark.clause("K6")
def test_the_pairs_of_the_window_are_kept_as_they_came(bright, first, room, slices, window, seed):
    pairs = contact(7, 40, 5, bright, seed=seed) if window else contact(7, bright, seed=seed)
    raw = bytearray(b"\xa5" * 4 * room)
    filled = capture(bounce_pairs=window, raw=raw, raw_first=first)
    feed(filled, pairs, slices)
    check(filled, pairs, window)
    start, _ = folding.after_bounces(pairs, window)
    assert start is not None
    assert kept(filled, raw) == wanted(pairs, start, first, room)
    if not window:  # a bounce leaves what it wrote behind the pairs that are kept
        behind = 4 * filled.raw_pairs()
        assert raw[behind:] == b"\xa5" * (4 * room - behind)


@pytest.mark.parametrize("first", [0, BIN_WORDS - 3, 16 * BIN_WORDS - 3, 40 * BIN_WORDS])
@pytest.mark.parametrize("slices", [125, 1000, 4000])
def test_the_window_may_lie_across_merges_and_many_turns_of_the_ring(first, slices):
    pairs = contact(3, 41 * BIN_WORDS)
    room = 9000
    raw = bytearray(4 * room)
    filled = capture(4096, raw=raw, raw_first=first)
    feed(filled, pairs, [slices] * 2000)
    check(filled, pairs, 0)
    assert kept(filled, raw) == wanted(pairs, 4, first, room)
    assert filled.raw_pairs() == min(room, filled.pairs() - first)


def test_a_window_behind_the_end_holds_nothing():
    pairs = contact(3, RING - LAP_MARGIN - 40)
    raw = bytearray(400)
    filled = capture(raw=raw, raw_first=5000)
    feed(filled, pairs)
    check(filled, pairs, 0)
    assert filled.raw_pairs() == 0
    assert raw == bytes(400)
