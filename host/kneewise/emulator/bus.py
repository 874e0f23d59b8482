"""The emulated board's calls as numbered requests, for firmware in another process.

Comes in: a number and two integers. Goes out: bytes.
"""

from __future__ import annotations

import struct
from collections.abc import Callable

from kneewise.emulator.board import Board, Level


def dispatch(board: Board, op: int, a: int = 0, b: int = 0) -> bytes:
    """Carry out one numbered request: an i64 in little endian, or the bytes of a take.

    Requests without a result answer 0. A negative level stands for an undriven pin.
    Raises PowerLost, and ValueError for a number that `OPS` does not have.
    """
    if not 1 <= op <= len(_CALLS):
        raise ValueError(f"no request has the number {op}; there are 1 to {len(_CALLS)}")
    reply = _CALLS[op - 1][1](board, a, b)
    if isinstance(reply, bytes):
        return reply
    return struct.pack("<q", reply or 0)


def _level(value: int) -> Level:
    return None if value < 0 else value


_Call = Callable[[Board, int, int], int | bytes | None]
# The order is the number: append only.
_CALLS: tuple[tuple[str, _Call], ...] = (
    ("now_us", lambda board, a, b: board.now_us()),
    ("wait", lambda board, a, b: board.wait(a)),
    ("tick_wall", lambda board, a, b: board.tick_wall()),
    ("quiet", lambda board, a, b: board.quiet(a)),
    ("relay", lambda board, a, b: board.relay(_level(a))),
    ("bleed_release", lambda board, a, b: board.bleed_release(_level(a))),
    ("pulse", lambda board, a, b: board.pulse(_level(a))),
    ("stop_loop_closed", lambda board, a, b: board.stop_loop_closed()),
    ("leads_reversed", lambda board, a, b: board.leads_reversed()),
    ("read", lambda board, a, b: board.read(a, b)),
    ("capture_start", lambda board, a, b: board.capture_start()),
    ("capture_written", lambda board, a, b: board.capture_written()),
    ("capture_take", lambda board, a, b: board.capture_take()),
    ("capture_stop", lambda board, a, b: board.capture_stop()),
    ("supervise", lambda board, a, b: board.supervise(a, b)),
    ("supervision_ticks", lambda board, a, b: board.supervision_ticks()),
    ("trips", lambda board, a, b: board.trips()),
    ("supervise_end", lambda board, a, b: board.supervise_end()),
    ("use_converters", lambda board, a, b: board.use_converters(a, b)),
    ("zero_input", lambda board, a, b: board.zero_input(_level(a))),
    ("supervise_breaks", lambda board, a, b: board.supervise_breaks(a)),
    ("trip_code", lambda board, a, b: board.trip_code()),
    ("watchdog", lambda board, a, b: board.watchdog(a)),
    ("reset_cause", lambda board, a, b: board.reset_cause),
)
OPS: dict[str, int] = {name: number for number, (name, _) in enumerate(_CALLS, start=1)}
"""Number of each request, for the emulated board file on the other side of a byte pair."""
