"""hal_rp2.py on an emulated RP2040: all times are emulated ones, not measured on silicon."""

import json
import struct

import pytest
from board_runs import CODES, IDLE_APP, PULSE, RELAY, RELEASE, START
from chip import Chip, missing

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))


# -- capture: without it the curve has gaps or its channels are swapped -------------------

CAPTURE = """
import binascii
for n in range(len(hal.ring)):
    hal.ring[n] = 0xEE
hal.capture_start()
t = hal.capture_began_us()
hal.wait_us({us})
n = hal.capture_written()
took = hal.now_us() - t
over = hal.capture_stop()
print(n, took, int(over), hal.capture_written())
print(binascii.hexlify(hal.ring).decode())
"""


@pytest.mark.parametrize("us", [12_000, 150_000])
def test_capture_keeps_pace_and_order(chip: Chip, us: int) -> None:
    numbers, ring = chip.run(START + CAPTURE.format(us=us)).splitlines()
    written, took, over, after = map(int, numbers.split())
    assert over == 0
    assert took >= us
    # `written` was read before the clock: a few lines of the interpreter lie between.
    assert written == pytest.approx(took / 4, abs=80)
    assert 0 <= after - written < 400
    pairs = [struct.unpack("<HH", pair) for pair in batched(bytes.fromhex(ring), 4)]
    assert len(pairs) == 4096
    full = min(after, 4096)
    assert set(pairs[:full]) == {(CODES[0], CODES[1])}
    # Beyond what was written only a lone voltage may follow.
    assert set(pairs[full + 1 :]) <= {(0xEEEE, 0xEEEE)}


def batched(data: bytes, size: int) -> list[bytes]:
    return [data[at : at + size] for at in range(0, len(data), size)]


def test_capture_starts_with_a_voltage_after_anything(chip: Chip) -> None:
    script = START + (
        "for n in (1, 2, 3):\n"
        "    hal.read(2, n)\n    hal.read(1, n)\n"
        "    hal.capture_start()\n    hal.wait_us(100 + n)\n    hal.capture_stop()\n"
        "    print(hal.ring[0] | hal.ring[1] << 8, hal.ring[2] | hal.ring[3] << 8)\n"
    )
    assert chip.run(script).split() == ["1000", "2000"] * 3


def test_lost_conversion_is_reported_once(chip: Chip) -> None:
    # DMA halted behind the driver's back for 40 us: the FIFO of four overflows.
    script = START + (
        "from machine import mem32\nfrom tracer import ring_rp2\n"
        "ctrl = ring_rp2.words[6] + 16\n"
        "hal.capture_start()\nmem32[ctrl] &= ~1\nhal.wait_us(40)\nmem32[ctrl] |= 1\n"
        "print(hal.capture_stop())\nhal.capture_start()\nhal.wait_us(100)\n"
        "print(hal.capture_stop())\n"
    )
    assert chip.run(script).split() == ["True", "False"]


def test_read_sums_one_channel(chip: Chip) -> None:
    script = START + "print([hal.read(c, n) for c in (2, 0, 1) for n in (1, 7, 4096)])"
    expected = [CODES[channel] * count for channel in (2, 0, 1) for count in (1, 7, 4096)]
    assert json.loads(chip.run(script)) == expected


def test_a_second_object_takes_over_a_running_capture(chip: Chip) -> None:
    # The prompt was reached in mid-capture; the service is entered again without a reset.
    script = START + "hal.capture_start()\nhal.supervise(4095, 4095, True)\nhal.pulse(20000)\n"
    chip.run(script + START + "print(hal.capture_written(), hal.read(0, 10))\n")
    again = chip.run(START + "hal.capture_start()\nhal.wait_us(1000)\nprint(hal.capture_stop())\n")
    assert again.strip() == "False"


# -- supervision: without it an over-voltage or an open lid is found too late -------------


def test_supervision_visits_every_millisecond(chip: Chip) -> None:
    script = START + (
        "hal.capture_start()\nhal.supervise(4000, 4000, True)\nhal.wait_us(100500)\n"
        "print(hal.supervision_ticks(), hal.trips())\nhal.supervise_end()\nhal.wait_us(3000)\n"
        "n = hal.supervision_ticks()\nhal.wait_us(5000)\nprint(hal.supervision_ticks() - n)\n"
        "hal.capture_stop()\n"
    )
    ticks, trips, later = map(int, chip.run(script).split())
    assert ticks in {100, 101}
    assert trips == 0
    assert later == 0


@pytest.mark.parametrize(
    ("voltage", "current", "trips"),
    [(1001, 2001, 0), (1000, 2001, 2), (1001, 2000, 4), (1000, 2000, 2)],
)
def test_supervision_compares_the_newest_pair(
    chip: Chip, voltage: int, current: int, trips: int
) -> None:
    script = START + (
        f"hal.capture_start()\nhal.wait_us(200)\nhal.supervise({voltage}, {current}, False)\n"
        "hal.wait_us(2500)\nprint(hal.trips())\nhal.supervise_end()\nhal.capture_stop()\n"
    )
    assert int(chip.run(script)) == trips


def test_supervision_latches_an_open_stop_loop(chip: Chip) -> None:
    script = START + (
        "print(hal.stop_loop_closed())\nhal.supervise(4095, 4095, True)\n"
        "while hal.stop_loop_closed(): pass\n"
        "while not hal.stop_loop_closed(): pass\nhal.wait_us(2000)\nprint(hal.trips())\n"
        "hal.supervise_end()\n"
    )
    chip.begin(script)
    chip.let_pass(50)
    chip.order("drive", pin=5, level=0)
    chip.let_pass(50)
    chip.order("drive", pin=5, level=1)
    output, trace = chip.finish()
    assert output.split() == ["True", "1"], trace


def test_open_wires_read_as_faults(chip: Chip) -> None:
    chip.order("drive", pin=5, level=None)
    chip.order("drive", pin=6, level=None)
    script = START + "print(hal.stop_loop_closed(), hal.leads_reversed())"
    assert chip.run(script).split() == ["False", "True"]


def test_a_supervision_visit_is_short(chip: Chip) -> None:
    script = START + (
        "from tracer import ring_rp2\nhal.capture_start()\nhal.wait_us(100)\n"
        "visit = ring_rp2.visit\nt = hal.now_us()\n"
        "for _ in range(1000): visit(None)\n"
        "print(hal.now_us() - t)\nhal.capture_stop()\n"
    )
    assert int(chip.run(script)) / 1000 < 20


# -- quiet: an allocation while charging can start a collection of milliseconds ------------


def test_nothing_allocates_while_quiet(chip: Chip) -> None:
    script = """
buffer = bytearray(64)
hal.watchdog(8000)
def quiet():
    hal.quiet_begin()
    try:
        try:
            bytearray(64)
            print("the heap is not locked")
        except MemoryError:
            pass
        hal.supervise(4095, 4095, True)
        hal.relay(True); hal.bleed(False); hal.pulse(5000)
        hal.stop_loop_closed(); hal.leads_reversed()
        hal.capture_start(); hal.wait_us(1500)
        hal.capture_written(); hal.supervision_ticks(); hal.trips()
        hal.link_read(buffer); hal.link_wait(1); hal.bleed_wait(1)
        hal.watchdog(8000); hal.pulse(5000); hal.pulse(0); hal.capture_stop()
        hal.supervise_end(); hal.safe(); hal.watchdog(0)
    finally:
        hal.quiet_end()
        hal.quiet_end()
quiet()
print(len(bytearray(5000)))
"""
    assert chip.run(START + script).strip() == "5000"


# -- time, resets, watchdog -------------------------------------------------------------


def test_clock_is_monotonic_over_the_carry() -> None:
    # Up for 71.6 minutes: the low word is about to wrap.
    with Chip(files=IDLE_APP, uptime_us=(1 << 32) - 2_000_000) as other:
        script = START + (
            "import gc\nwhile hal.now_us() < (1 << 32) - 60000: pass\n"
            "gc.collect()\ngc.disable()\n"  # a collection would take the moment away
            "while hal.now_us() < (1 << 32) - 3000: pass\n"
            "last = hal.now_us()\nbad = 0\nn = 0\n"
            "while last < (1 << 32) + 3000:\n"
            "    now = hal.now_us()\n    bad += not 0 < now - last < 1000\n"
            "    last = now\n    n += 1\nprint(bad, n)\n"
        )
        bad, count = map(int, other.run(script).split())
    assert bad == 0
    assert count > 20


def test_watchdog_bites_and_says_so(chip: Chip) -> None:
    boots = chip.boots()
    script = (
        "hal.relay(True)\nhal.bleed(False)\nhal.pulse(20000)\nhal.watchdog(200)\nwhile True: pass"
    )
    chip.begin(START + script)
    while chip.boots() == boots:
        chip.let_pass(10)
    chip.unplug()
    chip.let_pass(300)
    edges = chip.edges()
    last = {edge.pin: edge.level for edge in edges}
    assert last == {PULSE: 0, RELAY: 0, RELEASE: 0}
    highs = [edge.us for edge in edges if edge.level == 1]
    released = [edge.us for edge in edges if edge.level is None and edge.us > highs[-1]]
    assert 150_000 < released[0] - highs[0] < 250_000
    assert int(chip.run(START + "print(hal.reset_cause())")) == 3


def test_watchdog_fed_or_stopped_does_not_bite(chip: Chip) -> None:
    boots = chip.boots()
    feeding = "for _ in range(5):\n    hal.watchdog(200)\n    hal.wait_us(150000)\n"
    chip.run(START + feeding + "hal.watchdog(0)")
    chip.let_pass(600)
    assert chip.boots() == boots
    assert chip.run("print(1)").strip() == "1"


def test_reset_causes() -> None:
    with Chip(files=IDLE_APP) as chip:
        ask = START + "print(hal.reset_cause())"
        assert int(chip.run(ask)) == 1
        chip.link.sendall(b"\x04")  # a soft reset from the raw prompt
        chip.until(b"raw REPL; CTRL-B to exit\r\n>")
        assert int(chip.run(ask)) == 4


def test_identity(chip: Chip) -> None:
    script = START + "print(len(hal.device_id()), len({hal.random32() for _ in range(20)}))"
    assert chip.run(script).split() == ["8", "20"]


# -- the link ---------------------------------------------------------------------------


@pytest.mark.parametrize("length", [1, 63, 64, 65, 128, 511, 2000])
def test_link_echoes_frames_of_awkward_lengths(chip: Chip, length: int) -> None:
    frame = bytes(4 + n % 250 for n in range(length - 1)) + b"\x00"
    script = """
buffer = bytearray(256)
while left:
    hal.link_wait(1000)
    n = hal.link_read(buffer)
    sent = 0
    while sent < n:
        sent += hal.link_write(memoryview(buffer)[sent:n])
    left -= n
"""
    chip.begin(START + f"left = {3 * length}\n" + script)
    for _ in range(3):
        chip.link.sendall(frame)
        assert chip.until(b"\x00") == frame
    output, trace = chip.finish()
    assert (output, trace) == ("", "")


def test_link_write_ends_when_nobody_listens(chip: Chip) -> None:
    # The port is closed while the device writes, and opened again later.
    script = START + (
        "hal.wait_us(100000)\nt = hal.now_us()\nn = hal.link_write(bytes(5000))\n"
        "took = hal.now_us() - t\nhal.wait_us(1500000)\nprint('wrote', n, took)\n"
    )
    chip.begin(script)
    chip.unplug()
    chip.let_pass(1200)
    count, took = map(int, chip.until(b"\x04").split(b"wrote")[1].split()[:2])
    assert 0 <= count <= 5000
    assert took < 1_100_000


def test_link_wait_returns_when_a_byte_is_there(chip: Chip) -> None:
    script = START + (
        "t = hal.now_us()\nhal.link_wait(50)\nprint(hal.now_us() - t)\n"
        "t = hal.now_us()\nhal.bleed_wait(60000)\nprint(hal.now_us() - t)\n"
    )
    chip.begin(script)
    chip.let_pass(200)
    chip.link.sendall(b"x")
    output, _ = chip.finish()
    idle, woken = map(int, output.split())
    assert 49_000 < idle < 52_000
    assert woken < 2_000_000


# -- all together -------------------------------------------------------------------------

SOURCE = {
    "u_volt": [0, 30, 34, 36, 38, 39, 40],
    "i_ampere": [9.2, 9.1, 8.6, 7.6, 5.0, 2.9, 0],
    "c_farad": 0.0022,
    "line_ohm": 0.12,
    "bleed_ohm": 100,
    "volt_per_code": [0.015, 0.015],
    "ampere_per_code": 0.004,
}


def test_a_charge_by_hand(chip: Chip) -> None:
    chip.order("describe", plant=SOURCE)
    script = """
print(hal.read(0, 256) // 256, hal.read(1, 256) // 256, hal.read(2, 256) // 256)
hal.bleed(False)
hal.wait_us(20000)
hal.relay(True)
hal.wait_us(10000)
hal.capture_start()
for _ in range(20):
    hal.pulse(5000)
    hal.wait_us(1000)
hal.pulse(0)
written = hal.capture_written()
over = hal.capture_stop()
hal.relay(False)
hal.wait_us(20000)
print(hal.read(2, 256) // 256)
ring = hal.ring
def pair(n):
    at = 4 * (n & 4095)
    return ring[at] | ring[at + 1] << 8, ring[at + 2] | ring[at + 3] << 8
for n in (written - 4000, written - 2000, written - 100):
    print(*pair(n))
hal.bleed(True)
hal.wait_us(500000)
print(hal.read(2, 256) // 256, over)
hal.safe()
"""
    lines = [line.split() for line in chip.run(START + script).splitlines()]
    assert [int(word) for word in lines[0]] == [2667, 0, 0]  # open: 40 V
    held = int(lines[1][0]) * 0.015
    assert held > 39.5
    volts = [int(line[0]) * 0.015 for line in lines[2:5]]
    amperes = [int(line[1]) * 0.004 for line in lines[2:5]]
    assert volts == sorted(volts)
    assert amperes == sorted(amperes, reverse=True)
    assert volts[0] < 30 < volts[2]
    bled = int(lines[5][0]) * 0.015
    assert bled == pytest.approx(held * 2.718281828 ** (-0.5 / 0.22), rel=0.02)
    assert lines[5][1] == "False"
    assert chip.order("plant")["closings"] == 1
