"""The hot loop in the RP2040's own instructions against capture.py, on an emulated RP2040."""

from array import array

import pytest
from board_runs import IDLE_APP
from chip import Chip, missing

from kneewise.emulator.firmware import firmware_module

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

COMPARE = """
import time
from array import array
from tracer import capture, fold_thumb

x = 12345
ring = array("I", range(1024))
for n in range(1024):
    x = (x * 1103515245 + 12345) & 0x7FFFFFFF
    ring[n] = (x >> 8) & 4095 | ((x >> 16) & 4095) << 16
for n in range(64):
    ring[n] = 4095 if n & 1 else 4095 << 16
for unit in (1, 2, 3, 4, 8, 13, 16):
    told = []
    for fold in (capture.fold_units, fold_thumb.fold_units):
        bins = array("I", range(6144))
        control = array("I", (unit, ring[7], 5, 12, 960 // unit, 0, 0, 0, 0, 0, 0, 0, 0))
        fold(ring, bins, control)
        result = list(bins), list(control)
        spent = []
        for again in range(3):  # an interrupt may fall into one of them
            start = time.ticks_us()
            fold(ring, bins, control)
            spent.append(time.ticks_diff(time.ticks_us(), start))
        told.append((result[0], result[1], min(spent)))
    print(unit, told[0][:2] == told[1][:2], told[1][2] * 125 // (960 // unit * unit))
"""

PLACE = """
from binascii import hexlify
from tracer import capture, fold_thumb, knots
from tracer.memory import Buffers

buffers = Buffers()
ring = bytearray(4 * 1024)
made = capture.Capture(ring, 1024, buffers, fold_thumb.fold_units)
made.begin(50)
x = SEED
written = 0
while written < COUNT:
    for _ in range(min(1 + x % 900, COUNT - written)):
        x = (x * 1103515245 + 12345) & 0x7FFFFFFF
        pair = ((x >> 8) & 4095) | ((x >> 16) & 4095) << 16
        ring[4 * (written % 1024) : 4 * (written % 1024) + 4] = pair.to_bytes(4, "little")
        written += 1
    made.drain(written)
    while made.behind() >= 16:
        made.drain(written)
made.finish(written)
count = knots.place(made, 96, 384, 640, 2**33, 4, buffers)
print(made.pairs(), made.bin_pairs(), count)
print(hexlify(buffers.records[: 40 * count]).decode())
"""


def placed_here(seed: int, total: int) -> tuple[list[int], bytes]:
    """The same on CPython, with the portable code."""
    capture = firmware_module("tracer.capture")
    buffers = firmware_module("tracer.memory").Buffers()
    ring = array("I", bytes(4 * 1024))
    made = capture.Capture(ring, 1024, buffers)
    made.begin(50)
    x, written = seed, 0
    while written < total:
        for _ in range(min(1 + x % 900, total - written)):
            x = (x * 1103515245 + 12345) & 0x7FFFFFFF
            ring[written % 1024] = ((x >> 8) & 4095) | ((x >> 16) & 4095) << 16
            written += 1
        made.drain(written)
        while made.behind() >= 16:
            made.drain(written)
    made.finish(written)
    knots = firmware_module("tracer.knots")
    count = knots.place(made, 96, 384, 640, 2**33, 4, buffers)
    return [made.pairs(), made.bin_pairs(), count], bytes(buffers.records[: 40 * count])


@pytest.mark.parametrize(("seed", "total"), [(1, 700), (2, 3000), (3, 40000)])
def test_the_same_pairs_give_the_same_records_as_on_cpython(seed: int, total: int) -> None:
    """40 000 pairs fill bins of more than a unit; 32-bit words hold every number."""
    with Chip(files=IDLE_APP) as chip:
        program = PLACE.replace("SEED", str(seed)).replace("COUNT", str(total))
        counts, records = chip.run(program).splitlines()
    found = [int(word) for word in counts.split()], bytes.fromhex(records)
    assert found == placed_here(seed, total)


def test_it_folds_what_the_portable_code_folds_and_in_few_cycles() -> None:
    """A wrong register here would change every curve measured on a board, and no other."""
    with Chip(files=IDLE_APP) as chip:
        lines = [line.split() for line in chip.run(COMPARE).splitlines()]
    assert [int(line[0]) for line in lines] == [1, 2, 3, 4, 8, 13, 16]
    assert all(line[1] == "True" for line in lines)
    cycles = {int(line[0]): int(line[2]) for line in lines}
    # 500 cycles are there for a pair at 125 MHz and 250 000 pairs/s.
    assert cycles[1] <= 100
    assert cycles[8] <= 40
