"""If these fail, a frame that the device sends is not the one the host reads."""

from __future__ import annotations

import pytest
from cobs import cobs
from hypothesis import given, settings
from hypothesis import strategies as st
from test_on_micropython import on_micropython

from kneewise.emulator import process
from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.coder")
LARGEST = 256
ROOM = 259
UNTOUCHED = 0xA5
EDGES = [0, 1, 2, 252, 253, 254, 255, 256]

# Bodies of every edge without a zero, with zeros alone and with one zero at each end and around
# the end of a full block; then drawn ones, with more zeros in every fourth. Each is coded with
# the heap locked and told along with what came of it.
BATCH = r"""
import micropython
from binascii import hexlify
from tracer.coder import cobs_into

out = bytearray(ROOM)
blank = bytes([UNTOUCHED]) * ROOM


def tell(body, length):
    out[:] = blank
    micropython.heap_lock()
    count = cobs_into(body, length, out)
    micropython.heap_unlock()
    print(hexlify(body[:length] + b"-").decode(), count, hexlify(out).decode())


for length in EDGES:
    tell(bytearray(b"\xff" * LARGEST), length)
    tell(bytearray(LARGEST), length)
    for zero in (0, 1, 253, 254, length - 1):
        if 0 <= zero < length:
            body = bytearray(b"\x01" * LARGEST)
            body[zero] = 0
            tell(body, length)
x = 1
for number in range(DRAWN):
    body = bytearray(LARGEST)
    for place in range(LARGEST):
        x = (x * 1103515245 + 12345) & 0x7FFFFFFF
        body[place] = (x >> 16) & (255, 63, 3, 1)[number & 3]
    tell(body, (x >> 8) % (LARGEST + 1))
"""


def wanted(body: bytes) -> bytes:
    """The buffer after the call: the coding, the delimiter, and what stood there before."""
    coded = cobs.encode(body) + b"\x00"
    return coded + bytes([UNTOUCHED]) * (ROOM - len(coded))


def check(body: bytes, behind: bytes = b"\x00\x01") -> None:
    out = bytearray([UNTOUCHED]) * ROOM
    count = module.cobs_into(bytearray(body + behind), len(body), out)
    assert out == wanted(body)
    assert count == len(cobs.encode(body)) + 1


runs = st.lists(
    st.tuples(st.integers(1, LARGEST), st.one_of(st.just(0), st.integers(1, 255))), max_size=6
).map(lambda parts: b"".join(bytes([value]) * count for count, value in parts)[:LARGEST])


@settings(max_examples=400)
@given(st.one_of(st.binary(max_size=LARGEST), runs), st.binary(max_size=3))
def test_every_body_is_coded_as_the_host_codes_it(body: bytes, behind: bytes) -> None:
    check(body, behind)


@pytest.mark.parametrize("length", EDGES)
def test_the_end_of_a_full_block_is_where_the_host_has_it(length: int) -> None:
    check(bytes(length))
    check(b"\xff" * length)
    for zero in range(length):
        check(b"\x01" * zero + b"\x00" + b"\x01" * (length - zero - 1))


def test_the_longest_coding_fits_the_room_that_is_promised() -> None:
    assert max(len(wanted(b"\x01" * length).rstrip(b"\xa5")) for length in range(257)) == ROOM


@pytest.mark.skipif(not process.available(), reason="no MicroPython is packaged for this platform")
def test_native_code_on_micropython_codes_the_same_without_memory() -> None:
    names = {"ROOM": ROOM, "UNTOUCHED": UNTOUCHED, "LARGEST": LARGEST, "EDGES": EDGES}
    told = on_micropython(BATCH, **names, DRAWN=400)
    assert len(told) > 400
    for line in told:
        marked, count, out = line.split()
        body = bytes.fromhex(marked)[:-1]
        assert bytes.fromhex(out) == wanted(body), marked
        assert int(count) == len(cobs.encode(body)) + 1
