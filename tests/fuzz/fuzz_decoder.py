"""Fuzzes what a host makes of any bytes: frames, messages, the log, a session.

python -m tests.fuzz.fuzz_decoder FOUND tests/fuzz/corpus/decoder -max_total_time=300
"""

from __future__ import annotations

import json
from contextlib import suppress

from .coding import mended
from .targets import Virtual, fuzz, instrumented

with instrumented(__name__, "kneewire", "kneewise.link"):
    from kneewire import framing, seam
    from kneewire.messages import Refused, pack, pack_knot, unpack, unpack_knots
    from kneewise.errors import KneewiseError
    from kneewise.link.frames import FrameLog
    from kneewise.link.session import Session

LIMIT = 600
PIECE = 23
NONCE = 0x41424344


def one_input(data: bytes) -> None:
    for toward_device in (False, True):
        items = decoded(data, toward_device)
        for item in items:
            if isinstance(item, framing.Bad):
                assert len(item.raw) <= LIMIT
                item.text()
            else:
                message_of(item)
    both_coders(data)
    logged(data)
    conversed(data)
    # Past the CRC as well, which damaged bytes do not pass by chance.
    logged(again := mended(data, toward_device=False))
    conversed(again)
    for body in decoded(again, False):
        if isinstance(body, bytes):
            message_of(body)


def decoded(data: bytes, toward_device: bool) -> list[bytes | framing.Bad]:
    """The same, however the bytes are cut into pieces."""
    whole, pieces = (framing.Decoder(LIMIT, toward_device) for _ in range(2))
    items = whole.feed(data)
    again = [
        item for at in range(0, len(data), PIECE) for item in pieces.feed(data[at : at + PIECE])
    ]
    assert [shown(item) for item in items] == [shown(item) for item in again]
    assert whole.pending() == pieces.pending()
    assert whole.good + whole.bad == len(items)
    return items


def shown(item: bytes | framing.Bad) -> tuple[str, bytes]:
    return (item.reason, item.raw) if isinstance(item, framing.Bad) else ("", item)


def message_of(body: bytes) -> None:
    """What a message says is what its bytes were."""
    assert framing.decode_run(framing.encode(body, True)[:-1], True) == body
    assert framing.decode_run(framing.encode(body, False)[:-1], False) == body
    try:
        message = unpack(body)
    except Refused:
        return
    repr(message)
    again = pack(message.name, message.session, message.sequence, message.values)
    assert body.startswith(again)
    if message.name == "block":
        knots = unpack_knots(message["data"])
        assert b"".join(pack_knot(knot) for knot in knots) == message["data"]


def both_coders(data: bytes) -> None:
    """COBS in C and in Python take and refuse the same."""
    for run in data.split(b"\0"):
        found = []
        for decode in (seam.cobs_decode, seam.pure_decode):
            try:
                found.append(decode(run))
            except ValueError:
                found.append(None)
        assert found[0] == found[1]
    assert seam.pure_encode(data) == seam.cobs_encode(data)


def logged(data: bytes) -> None:
    """Whatever came can be shown to people and scripts."""
    log = FrameLog()
    for item in framing.Decoder(LIMIT, toward_device=False).feed(data):
        if isinstance(item, framing.Bad):
            log.bad(0.0, item)
        else:
            log.received(0.0, item)
            log.sent(0.0, item, item, again=False)
    for seen in log.entries():
        json.dumps(seen.row())
    log.summary()


def conversed(data: bytes) -> None:
    """A session that hears this fails in a way that says what to do, or not at all."""
    session = Session(Virtual(data), host_nonce=NONCE)
    with suppress(KneewiseError):
        session.hello(0.5)
        session.port.data = data
        session.request("status", deadline_s=0.5)
    session.port.data = data
    with suppress(KneewiseError):
        session.wait_notice("charge_ended", 0.5)


if __name__ == "__main__":
    fuzz(one_input)
