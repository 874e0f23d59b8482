"""What a capture must come to, by numpy: an account of its own to hold the firmware's against."""

from __future__ import annotations

from array import array
from collections.abc import Iterable
from typing import Any

import numpy as np
from fake_board import PAIR_US, Buffers, Capture

from kneewire.messages import KNOT_BYTES, unpack_knots
from kneewise.emulator.firmware import firmware_module

BINS = firmware_module("tracer.memory").BINS
LAP_MARGIN = firmware_module("tracer.capture").LAP_MARGIN
RING = 256  # pairs: small, so that it wraps often
THRESHOLD = 50
CONDUCTING_US = 2**33 + 12345


def capture(ring_pairs: int = RING, threshold: int = THRESHOLD) -> Any:
    made = Capture(array("I", bytes(4 * ring_pairs)), ring_pairs, Buffers())
    made.begin(threshold)
    return made


def feed(into: Any, pairs: np.ndarray, slices: Iterable[int]) -> None:
    """Let `pairs` arrive in the ring, a slice at a time; the last slice takes the rest."""
    written = 0
    cuts = iter(slices)
    while written < len(pairs):
        many = min(next(cuts, into.ring_pairs - LAP_MARGIN - 17), len(pairs) - written)
        for v, i in pairs[written : written + many].tolist():
            into.ring[written % into.ring_pairs] = v | i << 16
            written += 1
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


def scatter_terms(pairs: np.ndarray) -> np.ndarray:
    """Squared difference of each pair from the one before; the first has none."""
    steps = np.diff(pairs.astype(np.int64), axis=0, prepend=pairs[:1].astype(np.int64))
    return steps**2


def bin_pairs(count: int) -> int:
    """Pairs in a bin once `count` were folded: doubled whenever all bins were full."""
    size = 1
    while count >= BINS * size:
        size *= 2
    return size


def bins(pairs: np.ndarray) -> np.ndarray:
    """Sum of V, of I, scatter of V, of I, for every bin that holds a pair."""
    terms = np.hstack([pairs.astype(np.int64), scatter_terms(pairs)])
    starts = np.arange(0, len(pairs), bin_pairs(len(pairs)))
    return np.add.reduceat(terms, starts, axis=0) if len(pairs) else terms[:0]


def bins_of(filled: Any) -> np.ndarray:
    """The same of a capture, its split words put together."""
    words = np.array(filled.bins, dtype=np.int64).reshape(-1, 6)[: filled.used_bins()]
    high = words[:, [3, 5]] << 29
    return np.hstack([words[:, :2], words[:, [2, 4]] + high])


def filled(pairs: np.ndarray) -> Any:
    """A capture that has folded all of `pairs`, made quickly from the account above."""
    made = capture()
    rows = bins(pairs)
    size = bin_pairs(len(pairs))
    for number, (v, i, sv, si) in enumerate(rows.tolist()):
        split = (v, i, sv & (1 << 29) - 1, sv >> 29, si & (1 << 29) - 1, si >> 29)
        made.bins[6 * number : 6 * number + 6] = array("I", split)
    made.control[firmware_module("tracer.capture").C_FOUND] = 1
    made._bin_pairs = size
    made._bin, made._held = divmod(len(pairs), size)
    return made


def place(
    filled: Any, knots: int, *, buffers: Any = None, zeros: tuple[int, int] = (24 * 16, 40 * 16)
) -> list[dict[str, int]]:
    """The knots that the firmware places."""
    buffers = buffers or Buffers()
    module = firmware_module("tracer.knots")
    count = module.place(filled, knots, *zeros, CONDUCTING_US, PAIR_US, buffers)
    return unpack_knots(bytes(buffers.records[: count * KNOT_BYTES]))


def check_knots(pairs: np.ndarray, found: list[dict[str, int]], knots: int) -> None:
    """Each knot against the pairs that it claims to hold."""
    used_bins = -(-len(pairs) // bin_pairs(len(pairs)))
    assert len(found) == min(knots, used_bins)
    counts = [knot["pairs"] for knot in found]
    assert min(counts) >= 1
    assert sum(counts) == len(pairs)
    terms = np.hstack([pairs, scatter_terms(pairs)])
    ends = np.cumsum(counts)
    for knot, end in zip(found, ends.tolist(), strict=True):
        start = end - knot["pairs"]
        names = ("voltage_sum", "current_sum", "voltage_scatter", "current_scatter")
        assert [knot[name] for name in names] == terms[start:end].sum(axis=0).tolist()
        middle = PAIR_US * start + PAIR_US * (knot["pairs"] - 1) // 2
        assert knot["time_us"] == CONDUCTING_US + middle
