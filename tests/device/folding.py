"""What a capture must come to, by numpy: an account of its own to hold the firmware's against."""

from __future__ import annotations

from array import array
from collections.abc import Iterable
from itertools import pairwise
from typing import Any

import numpy as np
from fake_board import PAIR_US, Buffers, Capture

from kneewire.messages import KNOT_BYTES, KNOTS_A_BLOCK, unpack_knots
from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.capture")
records = firmware_module("tracer.records")
Placer = firmware_module("tracer.knots").Placer
WORK_WORDS = firmware_module("tracer.plane").WORK_WORDS
BIN_WORDS = firmware_module("tracer.memory").BIN_WORDS
LAP_MARGIN = module.LAP_MARGIN
RING = 256  # pairs: small, so that it wraps often
THRESHOLD = 50
CONDUCTING_US = 2**33 + 12345
ZEROS = (24 * 16, 40 * 16)
LARGEST_BEND = 16383


def capture(
    ring_pairs: int = RING, threshold: int = THRESHOLD, *, code_bits: int = 12, **begin: Any
) -> Any:
    ring = array("I", bytes(4 * ring_pairs))
    made = Capture(ring, ring_pairs, Buffers(), code_bits)
    made.begin(threshold, **begin)
    return made


def as_words(pairs: np.ndarray) -> array:
    return array("I", (pairs[:, 0] | pairs[:, 1] << 16).astype("<u4").tobytes())


def put(into: Any, words: array, start: int, stop: int) -> None:
    """Write words `start` to `stop` where the ring has them by then."""
    ring, size = into.ring, into.ring_pairs
    while start < stop:
        at = start % size
        many = min(stop - start, size - at)
        ring[at : at + many] = words[start : start + many]
        start += many


def feed(into: Any, pairs: np.ndarray, slices: Iterable[int] = ()) -> None:
    """Let `pairs` arrive in the ring, a slice at a time; behind `slices`, as many as it takes."""
    words = as_words(pairs)
    written = 0
    cuts = iter(slices)
    while written < len(words):
        many = min(next(cuts, into.ring_pairs - LAP_MARGIN - 17), len(words) - written)
        put(into, words, written, written + many)
        written += many
        into.drain(written)
        # A call is bounded in time: a charge calls again before it waits.
        while into.behind() >= 16 and not into.full:
            into.drain(written)


def finished(into: Any, pairs: np.ndarray) -> Any:
    """The capture, once the ring stands still."""
    into.finish(len(pairs))
    return into


def first_folded(pairs: np.ndarray, threshold: int = THRESHOLD) -> int | None:
    """The second of the first two pairs in a row above the threshold."""
    above = pairs[:, 1] > threshold
    both = np.flatnonzero(above[:-1] & above[1:])
    return int(both[0]) + 1 if len(both) else None


def after_bounces(
    pairs: np.ndarray, window: int, threshold: int = THRESHOLD
) -> tuple[int | None, int]:
    """First pair of the curve, and how often the contact had opened before.

    It has opened where two pairs in a row do not conduct, the second of them within `window` pairs
    of conduction; what it conducts before that counts into the window.
    """
    start = first_folded(pairs, threshold)
    bounces = 0
    while start is not None:
        low = pairs[start : start + window, 1] <= threshold
        both = np.flatnonzero(low[:-1] & low[1:])
        if not len(both):
            break
        bounces += 1
        opened = int(both[0]) + 2
        window = max(window - opened, 1)
        later = first_folded(pairs[start + opened :], threshold)
        start = None if later is None else start + opened + later
    return start, bounces


def layout(count: int, code_bits: int = 12) -> tuple[int, int]:
    """Pairs in a bin and words of a bin, once `count` pairs were folded.

    As long as both sums fit half a word, a bin is one word; beyond, half as many bins fit.
    """
    size = 1
    while size << code_bits <= 1 << 16:
        if count <= BIN_WORDS * size:
            return size, 1
        size *= 2
    size *= 2  # where bins become two words, four of them become one
    while count > BIN_WORDS // 2 * size:
        size *= 2
    return size, 2


def bins(pairs: np.ndarray, code_bits: int = 12) -> np.ndarray:
    """Sums of V and of I for every bin that holds a pair."""
    starts = np.arange(0, len(pairs), layout(len(pairs), code_bits)[0])
    whole = pairs.astype(np.int64)
    return np.add.reduceat(whole, starts, axis=0) if len(pairs) else whole[:0]


def bins_of(filled: Any) -> np.ndarray:
    """The same of a capture."""
    rest = filled.pairs() - filled.full_bins() * filled.bin_pairs()
    used = filled.full_bins() + (rest > 0)
    words = np.array(filled.bins, dtype=np.int64)
    if filled.wide:
        return words.reshape(-1, 2)[:used]
    return np.stack([words & 0xFFFF, words >> 16], axis=1)[:used]


def filled(pairs: np.ndarray, code_bits: int = 12) -> Any:
    """A capture that has folded all of `pairs`, made quickly from the account above."""
    size = layout(len(pairs), code_bits)[0]
    return holding(bins(pairs, code_bits), size, len(pairs), code_bits)


def holding(rows: np.ndarray, size: int, count: int, code_bits: int = 12) -> Any:
    """A capture whose bins are `rows`."""
    made = capture(code_bits=code_bits)
    made.wide = size << code_bits > 1 << 16
    words = rows.ravel() if made.wide else rows[:, 0] | rows[:, 1] << 16
    made.bins[: len(words)] = array("I", words.tolist())
    made._pairs = count
    made._bins = BIN_WORDS // 2 if made.wide else BIN_WORDS
    control = made.control
    control[module.C_FOUND] = 1
    control[module.C_BIN_PAIRS] = size
    control[module.C_BIN], held = divmod(count, size)
    control[module.C_LEFT] = size - held
    return made


class Placed:
    """The knots that the firmware places in a capture, and the records that it writes of them."""

    def __init__(
        self,
        filled: Any,
        knots: int,
        *,
        buffers: Any = None,
        work: Any = None,
        zeros: tuple[int, int] = ZEROS,
        measure: Any = None,
    ) -> None:
        buffers = buffers or Buffers()
        work = work or array("I", bytes(4 * WORK_WORDS))
        self.count = Placer(work, buffers, measure).place(filled, knots, *zeros)
        self.cuts = list(buffers.cuts[: self.count + 1])
        self.records = write(filled, buffers, self.count)
        self.current_sum = records.current_sum(buffers.placing, filled.bins, filled)
        self.knots = unpack_knots(self.records)


def write(filled: Any, buffers: Any, count: int, pair_us: int = PAIR_US) -> bytes:
    """The records of all knots, written block by block."""
    told = buffers.placing
    records.describe(told, filled, count, CONDUCTING_US, pair_us)
    out = b""
    for first in range(0, count, KNOTS_A_BLOCK):
        told[records.R_FIRST] = first
        told[records.R_COUNT] = many = min(KNOTS_A_BLOCK, count - first)
        told[records.R_OUT] = place = first % 7
        records.write(filled.bins, buffers.cuts, buffers.body, told)
        out += bytes(buffers.body[place : place + many * KNOT_BYTES])
    return out


def scatter_terms(rows: np.ndarray, full: int) -> np.ndarray:
    """What each bin adds: the squared second difference of the sums up to it, held at a bound."""
    terms = np.zeros_like(rows)
    steps = np.clip(np.diff(rows[:full], axis=0), -(2**29), 2**29 - 1)
    terms[2:full] = np.minimum(np.abs(np.diff(steps, axis=0)), LARGEST_BEND) ** 2
    return terms


def check_knots(pairs: np.ndarray, placed: Placed, knots: int, code_bits: int = 12) -> None:
    """Each knot against the pairs that it claims to hold."""
    size, _ = layout(len(pairs), code_bits)
    full = len(pairs) // size
    assert placed.count == min(knots, full or len(pairs))
    assert (placed.cuts[0], placed.cuts[-1]) == (0, full)
    assert full == 0 or all(b > a for a, b in pairwise(placed.cuts))
    found = placed.knots
    counts = [knot["pairs"] for knot in found]
    assert sum(counts) == len(pairs)
    assert min(counts) >= 1
    assert placed.current_sum == pairs[:, 1].sum()
    terms = scatter_terms(bins(pairs, code_bits), full)
    ends = np.cumsum(counts)
    for knot, end, first, after in zip(
        found, ends.tolist(), placed.cuts, placed.cuts[1:], strict=False
    ):
        start = end - knot["pairs"]
        assert start == size * first
        sums = pairs[start:end].sum(axis=0).tolist()
        assert [knot["voltage_sum"], knot["current_sum"]] == sums
        scatters = terms[first:after].sum(axis=0).tolist()
        assert [knot["voltage_scatter"], knot["current_scatter"]] == scatters
        middle = PAIR_US * (2 * start + knot["pairs"] - 1) // 2
        assert knot["time_us"] == CONDUCTING_US + middle
