"""If these fail, the slot that is started after one that has failed gets memory that the old one's
converters still write to, or an output that the old one's supervision still stops.
"""

from __future__ import annotations

import builtins
from pathlib import Path

import pytest
from board import Board
from fake_rp2 import Named
from from_text import Loader, sources
from rp2040_model import PULSE, STOP_LOOP

from kneewise.emulator.firmware import device_folder

MAIN = (
    (Path(device_folder()) / "main.py").read_text(encoding="utf-8").split("\ntry:\n    start()")[0]
)
TIMER = "    if timer is not None:\n        timer.deinit()\n"
EACH = "    for channel in range(12):\n"
DISABLED = (
    "        mem32[0x50000010 + 64 * channel] = 0  # DMA: AL1_CTRL, so that none starts again\n"
)
ABORTED = "    mem32[0x50000444] = 0xFFF  # CHAN_ABORT, all channels\n"
WAITED = "    while mem32[0x50000444]:\n        pass\n"
BROKEN = {
    "supervision left": (TIMER, ""),
    "EN left": (EACH + DISABLED, ""),
    "EN cleared late": (EACH + DISABLED + ABORTED, ABORTED + EACH + DISABLED),
    "not aborted": (ABORTED, ""),
    "abort not waited for": (WAITED, ""),
    "wave left": ("    mem32[0x50203000] = 0xF  # PIO0, PIO1: CTRL.SM_ENABLE cleared\n", ""),
    "SPI left": ("    mem32[0x50303000] = 0xF\n", ""),
    "converter left": ("    mem32[0x4004F000] = 8  # ADC: CS.START_MANY cleared\n", ""),
}
IN_FLIGHT_NS = 1500  # longer than all of the writes here


def forget(board: Board, text: str) -> None:
    """main.py's, in a process of which nobody collects anything."""
    chip = board.chip

    def collect() -> None:
        in_flight = [channel for channel in chip.dma.channels if channel.word is not None]
        assert not in_flight, "memory was handed back that a word is still to be written to"
        chip.clock.spend(2_000_000)

    modules = {f"tracer.{name}": module for name, module in board.loader._modules.items()}
    fakes = {
        "machine": board.machine,
        "gc": Named(collect=collect),
        "os": Named(),
        "sys": Named(path=["/a"], modules=modules),
    }
    own = {"__import__": lambda name, *_: fakes[name]}
    space = {"__builtins__": vars(builtins) | own}
    exec(text, space)
    space["safe_pins"]()
    space["forget"]("/a")
    assert modules == {}


def old_slot_is_at_rest(text: str) -> None:
    for spi in (False, True):
        for phase_ns in range(0, 4000, 250 if spi else 40):
            board = Board(Loader(sources()))
            chip = board.chip
            chip.pins.drive_from_outside(STOP_LOOP, 1)
            if spi:
                board.hal.use_converters(2, 4, 20_000, 700)
            chip.dma.flight_ns = IN_FLIGHT_NS
            board.hal.capture_start()
            board.hal.supervise(65535, 65535, True)
            board.hal.pulse(19_000)
            board.pass_us(2000)
            chip.clock.advance(chip.clock.now_ns + phase_ns)
            forget(board, text)
            ring = board.module("ring_rp2")
            channel = chip.dma.channels[ring._number]
            before = (channel.write, ring.words[0], chip.adc.conversions, len(chip.pins.edges))
            assert chip.dma.stray == 0, "a word was written by a channel that had been aborted"
            assert not channel.busy
            assert not channel.ctrl & 1
            assert not chip.clock.alarms, "the supervision goes on"
            assert not any(machine.enabled for pio in chip.pios for machine in pio.machines)
            board.pass_us(3000)
            after = (channel.write, ring.words[0], chip.adc.conversions, len(chip.pins.edges))
            assert after == before
            assert chip.pins.driven(PULSE) == 0


def test_a_forgotten_slot_is_at_rest() -> None:
    old_slot_is_at_rest(MAIN)


@pytest.mark.parametrize("name", BROKEN)
def test_a_slot_left_running_is_caught(name: str) -> None:
    old, new = BROKEN[name]
    assert MAIN.count(old) == 1
    with pytest.raises(AssertionError):
        old_slot_is_at_rest(MAIN.replace(old, new))
