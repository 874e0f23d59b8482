"""The hot loop in the RP2040's own instructions against capture.py, on an emulated RP2040."""

import pytest
from board_runs import IDLE_APP
from chip import Chip, missing

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
        control = array("I", (unit, ring[7], 5, 12, 960 // unit, 0, 0, 0, 0, 0))
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
