"""Folding, placing and writing on an emulated RP2040 against CPython."""

import hashlib
from array import array

import pytest
from board_runs import IDLE_APP
from chip import Chip, missing

from kneewise.emulator.firmware import firmware_module

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

RING_PAIRS = 1024
RECORD_BYTES = 40
# seed, pairs, knots, bits of a code, bounce window, of how many pairs each the contact opens first
CASES = {
    "bins of one pair": (1, 700, 96, 12, 0, 0),
    "few knots": (2, 3000, 24, 12, 0, 0),
    "bins of four": (3, 12000, 96, 12, 0, 0),
    "bins of two words": (4, 70000, 96, 12, 0, 0),
    "16 bits, bins of two words": (5, 9000, 48, 16, 0, 0),
    "a bouncing contact": (6, 5000, 96, 12, 400, 7),
}

# The same text on both: noise on a curve that bends twice, whole numbers alone.
DRAWN = """
class Drawn:
    def __init__(self, seed, total, code_bits, open_pairs):
        self.x = seed
        self.total = total
        self.code_bits = code_bits
        self.open_pairs = open_pairs

    def slice(self):
        return 1 + self.x % 900

    def pair(self, number):
        self.x = (self.x * 1103515 + 12345) & 0xFFFFFF
        at = number * 4095 // self.total
        v = min(4095, 100 + at * 2 if at < 1200 else 1940 + at // 2)
        i = 3900 - at // 40 if at < 3000 else max(3825 - (at - 3000) * 4, 60)
        v += self.x >> 8 & 7
        i += self.x >> 16 & 7
        if number // 20 % 2 and number < 40 * self.open_pairs // 7:
            i = 3  # open
        if self.code_bits == 16:
            v = (v << 4) + (self.x & 15)
            i = (i << 4) + (self.x >> 4 & 15)
        most = (1 << self.code_bits) - 1
        return min(v, most), min(i, most)


def run(capture, drawn, put):
    written = 0
    while written < drawn.total:
        for _ in range(min(drawn.slice(), drawn.total - written)):
            v, i = drawn.pair(written)
            put(written, v, i)
            written += 1
        capture.drain(written)
        while capture.behind() >= 16:
            capture.drain(written)
    capture.finish(written)
"""

ON_CHIP = (
    DRAWN
    + """
from binascii import hexlify
from hashlib import sha256
from tracer import knots, plane, plane_thumb, records
from tracer.capture import Capture
from tracer.memory import Buffers

SEED, TOTAL, KNOTS, CODE_BITS, BOUNCE, OPEN = ASKED
buffers = Buffers()
ring = bytearray(4 * RING_PAIRS)
made = Capture(ring, RING_PAIRS, buffers, CODE_BITS)
made.begin(50 << CODE_BITS - 12, BOUNCE)


def put(number, v, i):
    place = 4 * (number % RING_PAIRS)
    ring[place] = v & 255
    ring[place + 1] = v >> 8
    ring[place + 2] = i & 255
    ring[place + 3] = i >> 8


run(made, Drawn(SEED, TOTAL, CODE_BITS, OPEN), put)
work = bytearray(4 * plane.WORK_WORDS)
for measure in (None, plane_thumb.errors):
    count = knots.Placer(work, buffers, measure).place(made, KNOTS, 384, 640)
    told = buffers.placing
    records.describe(told, made, count, 2**33, 4)
    whole = sha256()
    for first in range(count):
        told[records.R_FIRST], told[records.R_COUNT], told[records.R_OUT] = first, 1, 0
        records.write(made.bins, buffers.cuts, buffers.body, told)
        whole.update(buffers.body[:40])
    print(made.skipped, made.bounces, made.pairs(), made.bin_pairs(), count)
    print(*buffers.cuts[: count + 1])
    print(hexlify(whole.digest()).decode())
"""
)


def told_here(
    seed: int, total: int, knots: int, code_bits: int, bounce: int, opened: int
) -> list[str]:
    """The same on CPython, with the portable code."""
    capture, placing, records, plane, memory = (
        firmware_module(f"tracer.{name}")
        for name in ("capture", "knots", "records", "plane", "memory")
    )
    names: dict = {}
    exec(DRAWN, names)  # the very text that the chip runs
    buffers = memory.Buffers()
    ring = array("I", bytes(4 * RING_PAIRS))
    made = capture.Capture(ring, RING_PAIRS, buffers, code_bits)
    made.begin(50 << code_bits - 12, bounce)

    def put(number: int, v: int, i: int) -> None:
        ring[number % RING_PAIRS] = v | i << 16

    names["run"](made, names["Drawn"](seed, total, code_bits, opened), put)
    work = array("I", bytes(4 * plane.WORK_WORDS))
    count = placing.Placer(work, buffers).place(made, knots, 384, 640)
    told = buffers.placing
    records.describe(told, made, count, 2**33, 4)
    whole = hashlib.sha256()
    for first in range(count):
        told[records.R_FIRST], told[records.R_COUNT], told[records.R_OUT] = first, 1, 0
        records.write(made.bins, buffers.cuts, buffers.body, told)
        whole.update(buffers.body[:RECORD_BYTES])
    counts = made.skipped, made.bounces, made.pairs(), made.bin_pairs(), count
    return [
        " ".join(map(str, counts)),
        " ".join(map(str, buffers.cuts[: count + 1])),
        whole.hexdigest(),
    ]


@pytest.mark.parametrize("case", CASES)
def test_the_same_pairs_give_the_same_cuts_and_records_as_on_cpython(case: str) -> None:
    """32-bit words hold every number, and the errors in the core's own instructions are the same:
    a wrong register there would change every curve measured on a board, and no other.
    """
    asked = CASES[case]
    with Chip(files=IDLE_APP) as chip:
        lines = chip.run(f"RING_PAIRS, ASKED = {RING_PAIRS}, {asked}\n{ON_CHIP}").splitlines()
    here = told_here(*asked)
    assert lines[:3] == here
    assert lines[3:] == here
    assert int(here[0].split()[1]) == (1 if asked[4] else 0)
