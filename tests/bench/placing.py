"""The firmware's own capture, placing and records, on CPython, fed with whole charges.

Comes in: the codes of every pair, or a curve without noise. Goes out: the knots that a board
would send, or where it places them.
"""

from __future__ import annotations

from array import array
from typing import Any

import numpy as np

from kneewise.emulator.firmware import firmware_module
from kneewise.instrument.sweep import unpack_records
from kneewise.instrument.trace import RawKnots

from .charges import CONDUCTING_US, PAIR_NS, Codes, Floats, Ints

capture = firmware_module("tracer.capture")
knots = firmware_module("tracer.knots")
memory = firmware_module("tracer.memory")
records = firmware_module("tracer.records")

RING_PAIRS = 4096
SLICE_PAIRS = 1500
ZERO_V_X16, ZERO_I_X16 = 16 * 24, 16 * 40
EXACT_CODE = 236_000
EXACT_BITS = 18


class Exact:
    """Bins without noise, a pair each, of a converter so fine that its codes do not count."""

    wide = True
    code_bits = EXACT_BITS

    def __init__(self, x: Floats, y: Floats) -> None:
        """`x`, `y`: the pairs in the plane, up to 1 each."""
        both = np.rint(EXACT_CODE * np.stack([x, y], axis=1)).astype(np.uint32)
        self.bins = array("I", both.tobytes())
        self._count = len(x)

    def full_bins(self) -> int:
        return self._count

    def pairs(self) -> int:
        return self._count

    def bin_pairs(self) -> int:
        return 1


def places(filled: Any, count: int, buffers: Any, zeros: tuple[int, int] = (0, 0)) -> Ints:
    """The cuts of `count` knots: first bins, and the end."""
    work = array("I", bytes(4 * RING_PAIRS))
    found = knots.Placer(work, buffers).place(filled, count, *zeros)
    return np.array(buffers.cuts[: found + 1], dtype=np.int64)


def exact_places(x: Floats, y: Floats, count: int) -> Ints:
    """Where `count` knots are placed on a curve without noise, given pair by pair."""
    return places(Exact(x, y), count, memory.Buffers())


def captured(codes: Codes, code_bits: int = 12) -> tuple[Any, Any]:
    """The capture that all pairs of a charge have gone through, and its buffers."""
    buffers = memory.Buffers()
    ring = array("I", bytes(4 * RING_PAIRS))
    into = capture.Capture(ring, RING_PAIRS, buffers, code_bits)
    into.begin(0)
    words = codes.voltage.astype(np.uint32) | codes.current.astype(np.uint32) << np.uint32(16)
    # The pair that may straddle the closing is skipped: it is no part of the charge.
    arriving = np.concatenate((np.array([0xFFFF << 16], dtype=np.uint32), words))
    for first in range(0, len(arriving), SLICE_PAIRS):
        piece = array("I", arriving[first : first + SLICE_PAIRS].tobytes())
        at = first % RING_PAIRS
        room = min(len(piece), RING_PAIRS - at)
        ring[at : at + room] = piece[:room]
        ring[: len(piece) - room] = piece[room:]
        written = first + len(piece)
        into.drain(written)
        while into.behind() > 1 and not into.full:
            into.drain(written)
    into.finish(len(arriving))
    return into, buffers


def sent(codes: Codes, count: int) -> tuple[RawKnots, int]:
    """The knots of one charge as they come over the wire, and the pairs of a bin."""
    into, buffers = captured(codes)
    if into.pairs() != len(codes.voltage) or into.overruns:
        raise ValueError(f"{into.pairs()} of {len(codes.voltage)} pairs were captured")
    found = len(places(into, count, buffers, (ZERO_V_X16, ZERO_I_X16))) - 1
    out = bytearray(found * records.RECORD_BYTES)
    told = buffers.placing
    records.describe(told, into, found, CONDUCTING_US, PAIR_NS // 1000)
    told[records.R_FIRST], told[records.R_COUNT], told[records.R_OUT] = 0, found, 0
    records.write(into.bins, buffers.cuts, out, told)
    return unpack_records(bytes(out)), into.bin_pairs()
