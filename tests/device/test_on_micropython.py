"""If these fail, the native code folds other numbers than CPython, or a long charge runs out of
memory while the contact is closed."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import folding
import pytest
from cases import CASES, RAW_FIRST, RAW_PAIRS, RING_PAIRS
from charging import ABORT, BEAT
from fake_board import PAIR_US, record

import kneewire
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
from array import array
from binascii import hexlify
from hashlib import sha256
from tracer import knots, plane, records
from tracer.capture import Capture

ring = bytearray(4 * RING_PAIRS)
raw = bytearray(4 * RAW_PAIRS)
capture = Capture(ring, RING_PAIRS, buffers, CODE_BITS)
capture.begin(THRESHOLD, BOUNCE_PAIRS, raw, RAW_FIRST)
written = 0
with open(FILE, "rb") as file:
    for arriving in SLICES:
        for _ in range(arriving):
            pair = file.read(4)
            if not pair:
                break
            place = 4 * (written % RING_PAIRS)
            ring[place : place + 4] = pair
            written += 1
        capture.drain(written)
        while capture.behind() >= 16:
            capture.drain(written)
capture.finish(written)
placer = knots.Placer(bytearray(4 * plane.WORK_WORDS), buffers)
count = placer.place(capture, KNOTS, *ZEROS)
told = buffers.placing
records.describe(told, capture, count, CONDUCTING_US, PAIR_US)
written = sha256()
for first in range(count):
    told[records.R_FIRST], told[records.R_COUNT], told[records.R_OUT] = first, 1, 0
    records.write(capture.bins, buffers.cuts, buffers.body, told)
    written.update(buffers.body[:40])
print(capture.skipped, capture.bounces, capture.pairs(), capture.bin_pairs(), count)
print(*buffers.cuts[: count + 1])
print(records.current_sum(told, capture.bins, capture))
used = capture.full_bins() + (capture.full_bins() * capture.bin_pairs() < capture.pairs())
bins = memoryview(capture.bins)[: used * 2 if capture.wide else used]
print(hexlify(sha256(bins).digest()).decode())
print(hexlify(sha256(memoryview(raw)[: 4 * capture.raw_pairs()]).digest()).decode())
print(hexlify(written.digest()).decode())
"""

QUIET = """
import micropython
from tracer import charge, hal
from tracer.capture import Capture
from tracer.ear import Ear
from tracer.held import Held
from tracer.logbook import Logbook
from tracer.profile import Profile
from tracer.sequencer import Sequencer


class Board(hal.Hal):
    # As few moving parts as a charge of SLICES slices needs; nothing here allocates.
    def __init__(self):
        self.ring = bytearray(4 * self.RING_PAIRS)
        for pair in range(self.RING_PAIRS):
            self.ring[4 * pair] = pair & 255
            self.ring[4 * pair + 1] = 1 + (pair & 7)
            if not 60 <= pair < 66:  # where the contact bounces, the first time
                self.ring[4 * pair + 3] = 2 + (pair & 3)
        self.us = 0
        self.slices = 0
        self.said = 0
        self.heard = b""
        self.given = 0

    def nothing(self, a=0, b=0, c=0):
        return 0

    bleed = relay = watchdog = supervise = supervise_end = trips = zero_input = nothing
    trip_code = use_contact = nothing

    def capture_start(self):
        self.us = 0

    def quiet_begin(self):
        micropython.heap_lock()

    def quiet_end(self):
        micropython.heap_unlock()

    def read(self, channel, count):
        return count * (2400 if channel == hal.VOLTAGE else 40 if channel == hal.CURRENT else 24)

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

    ticks_us = now_us

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


class Outputs(Sequencer):
    def __init__(self, hal):
        self.hal = hal
        self.logbook = Logbook(None)
        # As in the sequencer: an attribute that is new takes memory.
        self.contact_closed = False
        self.bleed_engaged = True


board = Board()
ear = Ear(board)
ear.expect(ABORT[1:])
capture = Capture(board.ring, board.RING_PAIRS, buffers)
profile = Profile(RECORD)
made = charge.Charge(board, profile, capture, ear)
held = Held(buffers, board.ring)
held.prepare(KNOTS, capture, profile)
raw = bytearray(4 * RAW_PAIRS) if RAW_PAIRS else None
result = made.run(charge.Settings(120000, raw, 400), Outputs(board), held)
placed = held.step()  # nothing is left of it
held.keep(bytes(range(16)), board)
print(result.end_reason, capture.pairs(), capture.bin_pairs(), board.slices)
print(placed, capture.bounces, held.raw_count, held.count, result.zero_conversions)
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


@pytest.mark.parametrize("case", CASES)
def test_native_code_folds_places_and_writes_what_cpython_does(case, tmp_path):
    asked = CASES[case]
    path = tmp_path / "pairs"
    path.write_bytes(folding.as_words(asked.pairs).tobytes())
    slices = asked.slices()
    rest = [500] * (2 + max(len(asked.pairs) - sum(slices), 0) // 500)
    names = {
        "FILE": str(path),
        "SLICES": slices + rest,
        "KNOTS": asked.knots,
        "CODE_BITS": asked.code_bits,
        "BOUNCE_PAIRS": asked.bounce_pairs,
        "RING_PAIRS": RING_PAIRS,
        "RAW_PAIRS": RAW_PAIRS,
        "RAW_FIRST": RAW_FIRST,
        "THRESHOLD": folding.THRESHOLD,
        "ZEROS": folding.ZEROS,
        "CONDUCTING_US": folding.CONDUCTING_US,
        "PAIR_US": PAIR_US,
    }
    assert on_micropython(FOLD, **names) == asked.run()


@pytest.mark.parametrize(("raw_pairs", "knots"), [(0, 96), (3000, 24)])
def test_a_charge_of_many_slices_takes_no_memory(raw_pairs, knots):
    """With the heap locked, the first object that a slice makes is an error.

    So with a contact that bounces, a raw window and knots that are placed before the relay is open.
    """
    names = {
        "ABORT": b"\0" + ABORT,
        "BEAT": BEAT,
        "RECORD": record(bounce_ms=1),
        "SLICES": 5000,
        "RAW_PAIRS": raw_pairs,
        "KNOTS": knots,
    }
    told, kept = on_micropython(QUIET, **names)
    reason, pairs, bin_pairs, slices = (int(word) for word in told.split())
    assert reason == firmware_module("tracer.charge").ABORTED
    assert slices > 5000
    assert pairs > 125 * 4990
    assert bin_pairs == folding.layout(pairs)[0]
    assert kept == f"True 1 {raw_pairs} {knots} {firmware_module('tracer.charge').READ_CONVERSIONS}"
