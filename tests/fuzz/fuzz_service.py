"""Fuzzes the firmware's service, past the CRC: what is mutated are bodies.

    python -m tests.fuzz.fuzz_service FOUND tests/fuzz/corpus/service -max_total_time=300

The input is runs of bytes, each ended by a zero. A run that is COBS is a frame, whose body
gets the live session, sequence and token where it has their placeholders, and a new CRC. A run of
two bytes lets time pass or changes the world. Anything else arrives as it is.
"""

from __future__ import annotations

from collections import deque

from .targets import fuzz, instrumented

with instrumented(__name__, "kneewire", "tracer"):
    from cobs import cobs

    from kneewire import framing
    from kneewire.messages import NO_SESSION

    from .world import Buffers, Done, FuzzBoard, Rig, counted_handlers

# Placeholders, as in the examples of the wire.
SESSION = 0x5B030200
TOKEN = 0x03020100
NEXT, LAST = 1, 2  # sequences
RUNS = 60
HELLO = framing.GUARD + framing.encode(
    bytes.fromhex("48ffffffff694b6e65") + b"\xee" * 8 + b"\0\1", toward_device=True
)
BUFFERS = Buffers()


def one_input(data: bytes) -> None:
    rig = Rig(BUFFERS)
    runs = deque(data.split(b"\0")[:RUNS])
    board = rig.board

    def turn(ms: int) -> None:
        board.pass_us(1000 * ms)
        if not runs:
            raise Done
        take(rig, runs.popleft())

    def listening() -> None:
        if runs:
            take(rig, runs.popleft())

    def reached(name: str) -> None:
        rig.oracle.carried += 1

    board.listening = listening
    with counted_handlers(rig.loop.service, reached):
        rig.serve(turn)
        rig.greet(HELLO)


def take(rig: Rig, run: bytes) -> None:
    """Let one run of the input happen."""
    board = rig.board
    if len(run) == 2:
        happen(board, *run)
        return
    try:
        body = cobs.decode(run)[: -framing.CRC_BYTES]
    except cobs.DecodeError:
        body = b""
    if body:
        board.arrive(framing.encode(mended(rig, body), toward_device=True))
    else:
        board.arrive(run + framing.DELIMITER)


def happen(board: FuzzBoard, what: int, how: int) -> None:
    if what == ord("t"):
        if not board.quiet:
            board.pass_us(10_000 * how)
    elif what == ord("c"):
        board.interrupt_after(1 + how % 64)
    elif what == ord("w"):
        board.mend()
        board.loop_closed = not how & 1
        board.reversed = bool(how & 2)
        board.bleed_broken = bool(how & 4)
        board.welded = bool(how & 8)
        board.source_v = (40.0, 66.0)[how >> 4 & 1]
        board.source_a = (9.0, 30.0)[how >> 5 & 1]
        board.pairs_stop_at = 300 if how & 64 else None
        board.capacitor_v = 30.0 if how & 128 and not board.quiet else board.capacitor_v


def mended(rig: Rig, body: bytes) -> bytes:
    """The body with what is live put in for its placeholders."""
    last = rig.loop.service.last_sequence
    session = rig.oracle.session
    body = put(body, 1, SESSION, NO_SESSION if session is None else session)
    body = put(put(body, 5, NEXT, min(last + 1, 0xFFFFFFFF)), 5, LAST, last)
    return put(body, 9, TOKEN, rig.oracle.token or 0)


def put(body: bytes, place: int, old: int, new: int) -> bytes:
    if body[place : place + 4] != old.to_bytes(4, "little"):
        return body
    return body[:place] + new.to_bytes(4, "little") + body[place + 4 :]


if __name__ == "__main__":
    fuzz(one_input)
