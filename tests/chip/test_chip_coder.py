"""COBS in the RP2040's own instructions against coder.py, on an emulated RP2040."""

import pytest
from board_runs import IDLE_APP
from chip import Chip, missing
from cobs import cobs

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

COMPARE = r"""
import time
from binascii import hexlify
from tracer import coder, coder_thumb

outs = bytearray(262), bytearray(262)
blank = bytes([0xA5]) * 262
coders = coder.cobs_into, coder_thumb.cobs_into


def same(body, length):
    counts = []
    for out, cobs_into in zip(outs, coders):
        out[:] = blank
        counts.append(cobs_into(body, length, out))
    behind = outs[1][counts[1] :]
    return counts[0] == counts[1] and outs[0] == outs[1] and behind == blank[counts[1] :]


x = 1
equal = 0
for number in range(400):
    body = bytearray(256)
    mask = (255, 255, 15, 1)[number & 3]
    for place in range(256):
        x = (x * 1103515245 + 12345) & 0x7FFFFFFF
        body[place] = (x >> 16) & mask | (number & 1)  # every second has no zero
    length = (0, 1, 253, 254, 255, 256, 256, 256)[number & 7] if number < 64 else (x >> 8) % 257
    equal += same(body, length)
    if number < 64:
        print(hexlify(body[:length] + b"-").decode(), hexlify(outs[1]).decode())
print(equal)
out = outs[1]
for body in (b"", bytes(256), b"\x01" * 256):
    for cobs_into in coders:
        spent = []
        for again in range(5):  # an interrupt may fall into one of them
            start = time.ticks_us()
            cobs_into(body, len(body), out)
            spent.append(time.ticks_diff(time.ticks_us(), start))
        print(min(spent))
"""


def test_it_codes_what_the_portable_code_codes_and_in_few_cycles() -> None:
    """A frame coded otherwise would be thrown away by the host as damaged, and sent for again."""
    with Chip(files=IDLE_APP) as chip:
        lines = chip.run(COMPARE).splitlines()
    for line in lines[:64]:
        body, out = (bytes.fromhex(word) for word in line.split())
        wanted = cobs.encode(body[:-1]) + b"\x00"
        assert out == wanted + b"\xa5" * (262 - len(wanted)), line
    assert int(lines[64]) == 400
    us = [int(line) for line in lines[65:]]
    # A byte's, without the interpreter's call; the clock tells whole microseconds.
    cycles = [(spent - us[place & 1]) * 125 / 256 for place, spent in enumerate(us)][2:]
    assert len(cycles) == 4
    assert max(cycles) <= 100
    assert max(cycles[1::2]) <= 20
