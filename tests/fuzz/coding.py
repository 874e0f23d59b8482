"""Frames, coded a second time: from SPEC.md, with nothing of kneewire."""

from __future__ import annotations

import re
import zlib

from cobs import cobs

LONGEST_RUN = 2 * (256 + 1 + 1)  # every byte of body, CRC and COBS may be escaped
PLAIN = re.compile(rb"[\x01-\x05]")
ESCAPED = re.compile(rb"\x02([A-E])")
BROKEN_ESCAPE = re.compile(rb"[\x01\x03-\x05]|\x02(?![A-E])")


def framed(body: bytes, *, toward_device: bool) -> bytes:
    """A run, without its delimiter."""
    run = cobs.encode(body + zlib.crc32(body).to_bytes(4, "little"))
    if toward_device:
        run = PLAIN.sub(lambda found: bytes([2, found[0][0] + 0x40]), run)
    return run


def unframed(run: bytes, *, toward_device: bool) -> bytes | None:
    """The body in a run, or None."""
    if toward_device and (len(run) > LONGEST_RUN or BROKEN_ESCAPE.search(run)):
        return None
    body, crc = whole(run, toward_device=toward_device)
    return body if body and zlib.crc32(body).to_bytes(4, "little") == crc else None


def whole(run: bytes, *, toward_device: bool) -> tuple[bytes, bytes]:
    """Body and CRC in a run, whether they agree or not; nothing where it is not COBS."""
    if toward_device:
        run = ESCAPED.sub(lambda found: bytes([found[1][0] - 0x40]), run)
    try:
        found = cobs.decode(run)
    except cobs.DecodeError:
        return b"", b""
    return found[:-4], found[-4:]


def mended(data: bytes, *, toward_device: bool) -> bytes:
    """A stream with the CRC put right of every run that is COBS."""
    runs = data.split(b"\0")
    for number, run in enumerate(runs):
        body, _ = whole(run, toward_device=toward_device)
        if body:
            runs[number] = framed(body, toward_device=toward_device)
    return b"\0".join(runs)
