"""Two SPI converters at the pins of an emulated RP2040: times are emulated, not measured on
silicon. The program itself is walked through by tests/device/test_spi_program.py, without a chip.

If these fail, V and I swap, lose bits or are taken at another instant than the host believes.
"""

import json
import random
import struct
from itertools import pairwise
from typing import Any

import pytest
from board_runs import CODES, IDLE_APP, START, wave
from chip import Chip, missing

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

USE = "hal.use_converters(2, {pair_us}, {clock_khz}, {convert_ns})\n"
USUAL = USE.format(pair_us=4, clock_khz=20_000, convert_ns=700)
LATEST_NS = 40  # a bit may take at 20 MHz: one clock of 7 cycles less 2, of 8 ns each
CAPTURE = """
import binascii
hal.capture_start()
hal.wait_us({us})
written = hal.capture_written()
dropped = hal.capture_stop()
print(written, int(dropped), hal.capture_written(), hal.capture_began_us())
print(binascii.hexlify(hal.ring).decode())
"""


def words(count: int) -> list[list[int]]:
    made = random.Random(count)
    edge = [[0, 0], [65535, 0], [0, 65535], [65535, 65535], [0x8000, 1], [1, 0x8000]]
    edge += [[1 << bit, 0] for bit in range(16)] + [[0, 1 << bit] for bit in range(16)]
    return edge + [[made.randrange(65536), made.randrange(65536)] for _ in range(count)]


def connect(chip: Chip, codes: list[list[int]], **parts: Any) -> None:
    spi = {"valid_ns": 25, "convert_ns": 700, "codes": codes, **parts}
    chip.order("describe", plant={"codes": CODES, "spi": spi})


def found_pairs(line: str) -> list[list[int]]:
    data = bytes.fromhex(line)
    return [list(struct.unpack_from("<HH", data, at)) for at in range(0, len(data), 4)]


# -- the codes ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("pair_us", "clock_khz", "convert_ns", "valid_ns"),
    [
        (4, 20_000, 700, LATEST_NS - 1),
        (2, 31_250, 10, 15),
        (3, 20_000, 1900, LATEST_NS - 1),
        (12, 2_000, 800, 490),
    ],
)
def test_every_pair_arrives_whole_at_the_exact_pace(
    chip: Chip, pair_us: int, clock_khz: int, convert_ns: int, valid_ns: int
) -> None:
    sent = words(600)
    connect(chip, sent, valid_ns=valid_ns, convert_ns=convert_ns)
    use = USE.format(pair_us=pair_us, clock_khz=clock_khz, convert_ns=convert_ns)
    numbers, ring = chip.run(
        START + use + CAPTURE.format(us=700 * pair_us) + "print(hal.PAIR_US)"
    ).splitlines()[:2]
    written, dropped, after, began_us = map(int, numbers.split())
    assert dropped == 0
    assert 700 <= written <= after
    assert found_pairs(ring)[: len(sent)] == sent
    seen = chip.order("plant")["spi"]
    assert seen["early"] == seen["wrong_clocks"] == 0
    steps = {round(after - before, 3) for before, after in pairwise(seen["rises"])}
    assert steps == {1000 * pair_us}
    assert 0 <= seen["rises"][0] / 1000 - began_us < 2  # the time of the first pair


def test_the_last_moment_for_a_bit_is_as_stated(chip: Chip) -> None:
    """One clock period less two system cycles; the bit of before is not read either."""
    sent = words(100)
    connect(chip, sent, valid_ns=LATEST_NS + 1)
    _, ring = chip.run(START + USUAL + CAPTURE.format(us=1000)).splitlines()
    assert not any(got == right for got, right in zip(found_pairs(ring), sent, strict=False))


def test_a_conversion_is_waited_for(chip: Chip) -> None:
    connect(chip, words(10), convert_ns=900)
    chip.run(START + USUAL + CAPTURE.format(us=400))
    seen = chip.order("plant")["spi"]
    assert seen["early"] >= 99  # at 104 cycles, 832 ns
    connect(chip, words(10), convert_ns=900)
    use = USE.format(pair_us=4, clock_khz=20_000, convert_ns=900)
    chip.run(START + use + CAPTURE.format(us=400))
    assert chip.order("plant")["spi"]["early"] == 0


def test_the_ring_laps_and_the_count_goes_on(chip: Chip) -> None:
    sent = [[n, 65535 - n] for n in range(12_000)]
    connect(chip, sent)
    numbers, ring = chip.run(START + USUAL + CAPTURE.format(us=40_000)).splitlines()
    after = int(numbers.split()[2])
    assert after > 9900
    pairs = found_pairs(ring)
    assert all(pairs[n & 4095] == sent[n] for n in range(after - 4096, after))


def test_unconnected_lines_read_full_scale(chip: Chip) -> None:
    _, ring = chip.run(START + USUAL + CAPTURE.format(us=100)).splitlines()
    assert found_pairs(ring)[:20] == [[65535, 65535]] * 20


@pytest.mark.parametrize("us", [60, 2000])
def test_a_late_dma_is_reported_once(chip: Chip, us: int) -> None:
    # DMA halted behind the driver's back: the FIFO of eight overflows.
    connect(chip, words(10))
    script = (
        "from machine import mem32\nfrom tracer import ring_rp2\n"
        "ctrl = ring_rp2.words[6] + 16\n"
        f"hal.capture_start()\nmem32[ctrl] &= ~1\nhal.wait_us({us})\nmem32[ctrl] |= 1\n"
        "hal.wait_us(100)\nprint(hal.capture_stop())\n"
        "hal.capture_start()\nhal.wait_us(100)\nprint(hal.capture_stop())\n"
    )
    assert chip.run(START + USUAL + script).split() == ["True", "False"]


def test_pairs_that_are_dropped_are_dropped_whole(chip: Chip) -> None:
    sent = [[n, 65535 - n] for n in range(2000)]
    connect(chip, sent)
    script = (
        "import binascii\nfrom machine import mem32\nfrom tracer import ring_rp2\n"
        "ctrl = ring_rp2.words[6] + 16\n"
        "hal.capture_start()\nhal.wait_us(100)\nmem32[ctrl] &= ~1\nhal.wait_us(300)\n"
        "mem32[ctrl] |= 1\nhal.wait_us(300)\nhal.capture_stop()\n"
        "print(hal.capture_written(), binascii.hexlify(hal.ring).decode())\n"
    )
    count, ring = chip.run(START + USUAL + script).split()
    pairs = found_pairs(ring)[: int(count)]
    numbers = [v for v, _ in pairs]
    assert all(i == 65535 - v for v, i in pairs)
    jumps = [after - before for before, after in pairwise(numbers) if after != before + 1]
    assert len(jumps) == 1
    assert jumps[0] > 10


# -- sums, supervision --------------------------------------------------------------------


def test_read_sums_one_of_the_pair_and_the_capacitor_by_the_chips_own(chip: Chip) -> None:
    connect(chip, [[1, 2], [65535, 40_000]])  # the first conversion after a rest does not count
    script = "print([hal.read(c, n) for c in (0, 1, 2) for n in (1, 7, 4096)])"
    codes = (65535, 40_000, CODES[2])
    expected = [codes[channel] * count for channel in (0, 1, 2) for count in (1, 7, 4096)]
    assert json.loads(chip.run(START + USUAL + script)) == expected
    assert max(expected) < 2**28


@pytest.mark.parametrize(
    ("voltage", "current", "trips"),
    [(50_001, 40_001, 0), (50_000, 40_001, 2), (50_001, 40_000, 4), (50_000, 40_000, 2)],
)
def test_supervision_compares_the_newest_pair(
    chip: Chip, voltage: int, current: int, trips: int
) -> None:
    connect(chip, [[65535, 65535]] * 200 + [[50_000, 40_000]])
    script = (
        f"hal.capture_start()\nhal.wait_us(1000)\nhal.supervise({voltage}, {current}, False)\n"
        "hal.wait_us(2500)\nprint(hal.trips(), hal.supervision_ticks())\n"
        "hal.supervise_end()\nhal.capture_stop()\n"
    )
    found, ticks = map(int, chip.run(START + USUAL + script).split())
    assert found == trips
    assert ticks in {2, 3}


def test_a_supervision_visit_is_short(chip: Chip) -> None:
    connect(chip, words(10))
    script = (
        "from tracer import ring_rp2\nhal.capture_start()\nhal.wait_us(100)\n"
        "visit = ring_rp2.visit\nt = hal.now_us()\n"
        "for _ in range(1000): visit(None)\n"
        "print(hal.now_us() - t)\nprint(hal.capture_stop())\n"
    )
    took, dropped = chip.run(START + USUAL + script).split()
    assert int(took) / 1000 < 20
    assert dropped == "False"


def test_the_bounded_pulse_runs_beside_a_capture(chip: Chip) -> None:
    connect(chip, words(10))
    script = "hal.capture_start()\nhal.pulse(5000)\nhal.wait_us(8000)\nprint(hal.capture_stop())"
    chip.edges()
    assert chip.run(START + USUAL + script).split() == ["False"]
    edges = wave(chip.edges())
    assert edges[-1].level == 0
    assert 4800 < edges[-1].us - edges[0].us <= 5000


# -- from one kind to the other, and what neither may do -----------------------------------


def test_kinds_change_in_place(chip: Chip) -> None:
    connect(chip, [[50_000, 40_000]])
    script = (
        "shown = lambda: print(hal.PAIR_US, hal.SKEW_NS, hal.CODE_BITS, hal.read(0, 1))\n"
        "shown()\nhal.use_converters(2, 10, 20000, 700)\nshown()\n"
        "hal.use_converters(2, 3, 20000, 700)\nshown()\n"
        "hal.use_converters(1, 4, 0, 0)\nshown()\n"
        "hal.capture_start()\nhal.wait_us(100)\nprint(hal.capture_stop())\n"
        "print(hal.ring[0] | hal.ring[1] << 8, hal.ring[2] | hal.ring[3] << 8)\n"
    )
    assert chip.run(START + script).splitlines() == [
        "4 2000 12 1000",
        "10 0 16 50000",
        "3 0 16 50000",
        "4 2000 12 1000",
        "False",
        "1000 2000",
    ]


@pytest.mark.parametrize(
    ("numbers", "message"),
    [
        ("1, 5, 0, 0", "no such converters"),
        ("3, 4, 0, 0", "no such converters"),
        ("2, 2, 20000, 1200", "pair_us is too short for conversion and 16 bits"),
        ("2, 4, 0, 700", "SPI clock is 0"),
    ],
)
def test_what_the_board_cannot_keep_is_refused(chip: Chip, numbers: str, message: str) -> None:
    with pytest.raises(RuntimeError, match=f"ValueError: {message}"):
        chip.run(START + f"hal.use_converters({numbers})")


def test_a_second_object_takes_over_a_running_capture(chip: Chip) -> None:
    connect(chip, [[50_000, 40_000]])
    chip.run(START + USUAL + "hal.capture_start()\nhal.supervise(65535, 65535, True)\n")
    after = "print(hal.capture_written(), hal.read(0, 10))\nhal.wait_us(100)\n"
    assert chip.run(START + after).split() == ["0", str(10 * CODES[0])]
    quiet = len(chip.order("plant")["spi"]["rises"])
    chip.let_pass(1)
    assert len(chip.order("plant")["spi"]["rises"]) == quiet
    again = "hal.capture_start()\nhal.wait_us(1000)\nprint(hal.capture_stop())\n"
    assert chip.run(START + USUAL + again).strip() == "False"


def test_nothing_allocates_while_quiet(chip: Chip) -> None:
    connect(chip, [[50_000, 40_000]])
    script = """
def quiet():
    hal.quiet_begin()
    try:
        hal.zero_input(True); hal.zero_input(False)
        hal.supervise(65535, 65535, True)
        hal.capture_start(); hal.wait_us(1500)
        hal.capture_written(); hal.supervision_ticks(); hal.trips()
        dropped = hal.capture_stop()
        hal.supervise_end()
    finally:
        hal.quiet_end()
    print(dropped)
quiet()
"""
    assert chip.run(START + USUAL + script).strip() == "False"


def test_zero_input_is_low_until_asked_for(chip: Chip) -> None:
    script = (
        "from machine import mem32\n"
        "pin = lambda: print(mem32[0xD0000010] >> 7 & 1, mem32[0xD0000020] >> 7 & 1)\n"
        "pin()\nhal.zero_input(True)\npin()\nhal.zero_input(False)\npin()\n"
    )
    assert chip.run(START + script).splitlines() == ["0 1", "1 1", "0 1"]


# -- memory -------------------------------------------------------------------------------


def test_the_ring_takes_no_more_than_itself() -> None:
    """Without this 16 KiB of the board's 200 go into aligning it."""
    script = (
        "import gc\nfrom tracer import hal, pulse_pio\ngc.collect()\nbefore = gc.mem_alloc()\n"
        "from tracer import ring_rp2\ngc.collect()\nprint(gc.mem_alloc() - before)\n"
        "import uctypes\nprint(uctypes.addressof(ring_rp2.ring) & 16383, len(ring_rp2.ring))\n"
    )
    with Chip(files=IDLE_APP) as fresh:
        taken, at, size = map(int, fresh.run(script).split())
    assert (at, size) == (0, 16384)
    assert taken - size < 6000  # its code and words


def test_the_spi_module_is_loaded_only_where_it_is_used(chip: Chip) -> None:
    script = "import sys\nprint('tracer.spi_pair' in sys.modules)\n"
    with Chip(files=IDLE_APP) as fresh:
        assert fresh.run(START + "hal.use_converters(1, 4, 0, 0)\n" + script).strip() == "False"
