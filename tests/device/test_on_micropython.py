"""If these fail, the native code folds other numbers than CPython, or a long charge runs out of
memory while the contact is closed."""

from __future__ import annotations

import subprocess
import sys
from array import array
from pathlib import Path

import folding
import numpy as np
import pytest
from charging import ABORT, BEAT
from fake_board import PAIR_US, Buffers, record

import kneewire
from kneewire.messages import KNOT_BYTES
from kneewise.emulator import process
from kneewise.emulator.firmware import device_folder, firmware_module

pytestmark = pytest.mark.skipif(
    not process.available(), reason="no MicroPython is packaged for this platform"
)

START = f"""
import sys
sys.path[:] = ["", {str(device_folder())!r}, {str(Path(kneewire.__file__).parents[1])!r}]
from tracer.memory import Buffers
buffers = Buffers()
"""

FOLD = """
from binascii import hexlify
from tracer import knots
from tracer.capture import Capture

ring = bytearray(4 * 256)
capture = Capture(ring, 256, buffers)
capture.begin(50)
x = SEED
written = 0
while written < COUNT:
    for _ in range(min(1 + x % 175, COUNT - written)):
        x = (x * 1103515245 + 12345) & 0x7FFFFFFF
        pair = ((x >> 8) & 4095) | ((x >> 16) & 4095) << 16
        ring[4 * (written % 256) : 4 * (written % 256) + 4] = pair.to_bytes(4, "little")
        written += 1
    capture.drain(written)
    while capture.behind() >= 16:
        capture.drain(written)
capture.finish(written)
print(capture.skipped, capture.pairs(), capture.bin_pairs())
print(hexlify(capture.bins).decode())
count = knots.place(capture, 96, 384, 640, 2**33, 4, buffers)
print(count, hexlify(buffers.records).decode())
"""

QUIET = """
import micropython
from tracer import charge, hal
from tracer.capture import Capture
from tracer.ear import Ear
from tracer.profile import Profile


class Board(hal.Hal):
    # As few moving parts as a charge of SLICES slices needs; nothing here allocates.
    def __init__(self):
        self.ring = bytearray(4 * self.RING_PAIRS)
        for pair in range(self.RING_PAIRS):
            self.ring[4 * pair] = pair & 255
            self.ring[4 * pair + 1] = 1 + (pair & 7)
            self.ring[4 * pair + 3] = 2 + (pair & 3)
        self.us = 0
        self.slices = 0
        self.said = 0
        self.heard = b""
        self.given = 0

    def nothing(self, a=0, b=0, c=0):
        return 0

    bleed = relay = watchdog = supervise = supervise_end = trips = nothing

    def capture_start(self):
        self.us = 0

    def quiet_begin(self):
        micropython.heap_lock()

    def quiet_end(self):
        micropython.heap_unlock()

    def read(self, channel, count):
        return count * (2400 if channel == hal.VOLTAGE else 40)

    def capture_began_us(self):
        return 0

    def capture_written(self):
        return self.us >> 2

    def capture_stop(self):
        return False

    def supervision_ticks(self):
        return self.us // 1000

    def pulse(self, us):
        pass

    def now_us(self):
        return self.us

    def wait_us(self, us):
        self.us += us
        self.slices += 1

    def link_read(self, buffer):
        if self.given == len(self.heard):
            if self.said == self.slices or self.slices & 63 and self.slices <= SLICES:
                return 0
            self.said = self.slices
            self.heard = ABORT if self.slices > SLICES else BEAT
            self.given = 0
        count = min(len(buffer), len(self.heard) - self.given)
        for place in range(count):
            buffer[place] = self.heard[self.given + place]
        self.given += count
        return count


class Outputs:
    def __init__(self):
        # As in the sequencer: an attribute that is new takes memory.
        self.contact_closed = False
        self.bleed_engaged = True

    def make_safe(self):
        pass


board = Board()
ear = Ear(board)
ear.expect(ABORT[1:])
capture = Capture(board.ring, board.RING_PAIRS, buffers)
made = charge.Charge(board, Profile(RECORD), capture, ear)
result = made.run(120000, Outputs())
print(result.end_reason, capture.pairs(), capture.bin_pairs(), board.slices)
"""


def on_micropython(program: str, **names: object) -> list[str]:
    words = "".join(f"{name} = {value!r}\n" for name, value in names.items())
    start = [sys.executable, "-c", "from micropython_unix import main; main()"]
    run = subprocess.run(
        [*start, "-X", "heapsize=400k", "-c", START + words + program],
        capture_output=True,
        text=True,
        check=False,
        timeout=60,
    )
    said = run.stdout + run.stderr
    assert run.returncode == 0, said[-2000:]
    assert "Traceback" not in said, said[-2000:]
    return run.stdout.splitlines()


def drawn(seed: int, count: int) -> np.ndarray:
    """The codes that `FOLD` draws."""
    pairs = []
    x = seed
    for _ in range(count):
        x = (x * 1103515245 + 12345) & 0x7FFFFFFF
        pairs.append(((x >> 8) & 4095, (x >> 16) & 4095))
    return np.array(pairs)


@pytest.mark.parametrize(("seed", "count"), [(1, 700), (2, 3000), (3, 20000)])
def test_native_code_folds_and_places_what_cpython_does(seed, count):
    counts, bins, placed = on_micropython(FOLD, SEED=seed, COUNT=count)
    pairs = drawn(seed, count)
    start = folding.first_folded(pairs)
    folded = pairs[start:]
    assert counts.split() == [str(n) for n in (start, len(folded), folding.bin_pairs(len(folded)))]
    filled = folding.filled(folded)
    words = 6 * filled.used_bins()  # what stands behind them is left from before
    assert list(array("I", bytes.fromhex(bins)))[:words] == list(filled.bins)[:words]
    buffers = Buffers()
    knots = firmware_module("tracer.knots")
    number = knots.place(filled, 96, 384, 640, 2**33, PAIR_US, buffers)
    count_there, records = placed.split()
    assert int(count_there) == number
    used = number * KNOT_BYTES
    assert bytes.fromhex(records)[:used] == bytes(buffers.records[:used])


def test_a_charge_of_many_slices_takes_no_memory():
    # With the heap locked, the first object that a slice makes is an error.
    names = {"ABORT": b"\0" + ABORT, "BEAT": BEAT, "RECORD": record(), "SLICES": 5000}
    (told,) = on_micropython(QUIET, **names)
    reason, pairs, bin_pairs, slices = (int(word) for word in told.split())
    assert reason == firmware_module("tracer.charge").ABORTED
    assert slices > 5000
    assert pairs > 125 * 4990
    assert bin_pairs == 1024
