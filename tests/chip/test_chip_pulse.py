"""The bounded pulse on an emulated RP2040: times are emulated, not measured on silicon."""

from itertools import pairwise

import pytest
from board_runs import CALL_US, PERIOD_US, PULSE, RELAY, RELEASE, START, wave
from chip import Chip, missing

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))


# -- the bounded pulse: without it a hung interpreter leaves the contact closed ----------


def test_pulse_is_a_square_wave_fast_enough_for_its_driver(chip: Chip) -> None:
    chip.run(START + "hal.pulse(5000)\nhal.wait_us(8000)")
    edges = wave(chip.edges())
    rises = [edge.us for edge in edges if edge.level == 1]
    steps = [after - before for before, after in pairwise(rises)]
    assert steps == pytest.approx([PERIOD_US] * len(steps), abs=0.02)
    assert 1e6 / PERIOD_US >= 10_000
    gaps = [after.us - before.us for before, after in pairwise(edges)]
    assert max(gaps) < 50, "the driver would open between two edges"


@pytest.mark.parametrize("us", [100, 5000, 20000, 1000000])
def test_pulse_ends_by_itself_and_low(chip: Chip, us: int) -> None:
    called = int(chip.run(START + f"t = hal.now_us()\nhal.pulse({us})\nprint(t)"))
    chip.let_pass(30)
    edges = wave(chip.edges())
    assert edges[-1].level == 0
    bound = min(us, 20000)
    assert called <= edges[0].us
    assert edges[-1].us - called <= bound + CALL_US
    assert bound - 3 * PERIOD_US < edges[-1].us - edges[0].us <= bound


def test_pulse_ends_while_the_interpreter_hangs(chip: Chip) -> None:
    chip.begin(START + "t = hal.now_us()\nhal.pulse(5000)\nprint(t)\nwhile True: pass")
    chip.let_pass(100)
    edges = wave(chip.edges())
    chip.link.sendall(b"\x03")
    output, _ = chip.finish()
    assert edges[-1].level == 0
    assert edges[-1].us - int(output) < 5000 + CALL_US


def test_renewals_replace_what_is_left(chip: Chip) -> None:
    script = START + (
        "for _ in range(5):\n    hal.pulse(5000)\n    t = hal.now_us()\n"
        "print(t)\nhal.wait_us(12000)\n"
    )
    last = int(chip.run(script))
    edges = wave(chip.edges())
    assert edges[-1].level == 0
    assert edges[-1].us - last <= 5000
    assert edges[-1].us - last > 5000 - 3 * PERIOD_US


def test_a_shorter_renewal_shortens(chip: Chip) -> None:
    script = "hal.pulse(20000)\nhal.wait_us(1000)\nhal.pulse(1000)\nt = hal.now_us()\n"
    last = int(chip.run(START + script + "print(t)\nhal.wait_us(20000)\n"))
    assert wave(chip.edges())[-1].us - last <= 1000


def test_garbage_in_a_full_fifo_stays_within_the_bound(chip: Chip) -> None:
    # Not through the driver: words that a wild write would leave in the FIFO.
    script = START + (
        "from machine import mem32\nhal.pulse(200)\nt = hal.now_us()\n"
        "for _ in range(9):\n    mem32[0x50200010] = 0xFFFFFFFF\n"
        "print(t)\nhal.wait_us(40000)\n"
    )
    last = int(chip.run(script))
    edges = wave(chip.edges())
    assert edges[-1].level == 0
    # 511 periods, and one period for each of four queued words and the one under way.
    assert edges[-1].us - last < (511 + 5) * PERIOD_US + 500


def test_pulse_of_zero_stops_at_once_at_either_level(chip: Chip) -> None:
    script = START + (
        "for n in range(40):\n"
        "    hal.pulse(5000)\n    hal.wait_us(300 + n)\n    hal.pulse(0)\n    hal.wait_us(500)\n"
    )
    chip.run(script)
    edges = wave(chip.edges())
    ends = [
        (before, after)
        for before, after in zip(edges, [*edges[1:], None], strict=True)
        if after is None or after.us - before.us > 200
    ]
    assert len(ends) == 40
    assert all(before.level == 0 for before, _ in ends)
    highs = {round(after.us - before.us) for before, after in pairwise(edges) if before.level == 1}
    assert min(highs) < 18 <= max(highs), "both levels must have been met"


@pytest.mark.parametrize("delay", [0, 13, 26])
def test_soft_reset_leaves_no_wave(chip: Chip, delay: int) -> None:
    # From the raw prompt, so that main.py does not run: only the hardware's bound is left.
    script = f"hal.pulse(20000)\nhal.wait_us({1000 + delay})\nmachine.soft_reset()"
    chip.begin("import machine\n" + START + script)
    chip.until(b"raw REPL; CTRL-B to exit\r\n>")
    chip.let_pass(30)
    edges = wave(chip.edges())
    assert edges[-1].us - edges[0].us < 2500
    chip.let_pass(5)
    assert wave_is_over(chip)


def wave_is_over(chip: Chip) -> bool:
    return not [edge for edge in chip.edges() if edge.pin == PULSE]


def test_safe_drops_every_output(chip: Chip) -> None:
    chip.run(START + "hal.relay(True)\nhal.bleed(False)\nhal.pulse(20000)\nhal.safe()\nhal.safe()")
    last = {edge.pin: edge.level for edge in chip.edges()}
    assert last == {PULSE: 0, RELAY: 0, RELEASE: 0}
