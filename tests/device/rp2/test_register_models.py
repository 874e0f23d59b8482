"""If these fail, the models that the firmware's register files are tested on are not the RP2040,
and what those tests say of the firmware is worth nothing.

Each model is held to the RP2040 datasheet here, without the firmware.
"""

from __future__ import annotations

import random

import pytest
from board import Board
from bus import Fault
from checks_spi import Converters
from fake_machine import FakeMachine
from from_text import Loader, sources
from memory_model import SRAM
from pio_walk import Walk, timing
from pointers import pointers
from rp2040_model import DMA, IO_BANK0, PIO0, PIO1, SIO, TIMER, WATCHDOG, Rp2040
from watchdog_model import BoardReset

ADC = 0x4004C000


@pytest.fixture
def chip() -> Rp2040:
    return Rp2040()


# -- the bus (datasheet 2.1.2, 2.2) --------------------------------------------------------


def test_aliases_flip_set_and_clear(chip: Rp2040) -> None:
    """The reference: +0x1000 XOR, +0x2000 SET, +0x3000 CLR."""
    scratch = WATCHDOG + 0x0C
    chip.bus.write(scratch, 0b1100)
    chip.bus.write(scratch + 0x1000, 0b1010)
    assert chip.bus.read(scratch) == 0b0110
    chip.bus.write(scratch + 0x2000, 0b1001)
    assert chip.bus.read(scratch) == 0b1111
    chip.bus.write(scratch + 0x3000, 0b0101)
    assert chip.bus.read(scratch) == 0b1010


@pytest.mark.parametrize(
    ("address", "value"),
    [
        (ADC + 0x24, 0),  # no such register
        (0x40020000, 0),  # a peripheral that is not modelled
        (ADC, 1 << 21),  # reserved in CS
        (ADC + 4, 1),  # RESULT can only be read
        (WATCHDOG + 8, 1),  # REASON can only be read
        (DMA + 12, 1 << 25),  # reserved in CTRL
        (PIO0, 1 << 12),  # reserved in CTRL
        (SIO + 0x2000 + 0x10, 1),  # SIO has no aliases
        (SIO + 0x10, 1 << 30),  # there are 30 pins
        (SRAM, 0),  # no buffer there
        (ADC + 2, 0),  # not aligned
    ],
)
def test_what_the_chip_has_not_is_a_fault(chip: Rp2040, address: int, value: int) -> None:
    with pytest.raises(Fault):
        chip.bus.write(address, value)


def test_a_wait_that_never_ends_is_a_fault(chip: Rp2040) -> None:
    def wait_for_a_converter_that_is_off() -> None:
        while not chip.bus.read(ADC) & 0x100:
            pass

    with pytest.raises(Fault, match="waits for ever at 0x4004c000"):
        wait_for_a_converter_that_is_off()


def test_words_are_signed_where_native_code_has_them_so(chip: Rp2040) -> None:
    ptr32 = pointers(chip.bus)["ptr32"]
    ptr32(WATCHDOG + 0x0C)[1] = -2
    assert ptr32(WATCHDOG + 0x0C)[1] == -2
    assert chip.bus.read(WATCHDOG + 0x10) == 0xFFFFFFFE


# -- the converter (datasheet 4.9) ---------------------------------------------------------


def test_a_full_fifo_drops_and_says_so_until_told(chip: Rp2040) -> None:
    codes = iter(range(100))
    chip.adc.source = lambda channel, ns, before: next(codes)
    chip.bus.write(ADC + 8, 1)
    chip.bus.write(ADC, 1 | 8)
    chip.clock.advance(chip.clock.now_ns + 8500)
    fcs = chip.bus.read(ADC + 8)
    assert (fcs >> 16 & 15, fcs & 0x800) == (4, 0)
    chip.clock.advance(chip.clock.now_ns + 2000)
    assert chip.bus.read(ADC + 8) & 0x800
    chip.bus.write(ADC + 0x3000, 8)
    chip.clock.advance(chip.clock.now_ns + 2000)
    assert [chip.bus.read(ADC + 12) for _ in range(4)] == [0, 1, 2, 3]
    assert chip.bus.read(ADC + 8) & 0xF00 == 0x900  # OVER and EMPTY
    chip.bus.read(ADC + 12)
    assert chip.bus.read(ADC + 8) & 0xC00 == 0xC00  # UNDER as well
    chip.bus.write(ADC + 8, 0x800)
    assert chip.bus.read(ADC + 8) & 0xC00 == 0x400


def test_round_robin_goes_on_from_ainsel(chip: Rp2040) -> None:
    chip.bus.write(ADC, 1 | 8 | 1 << 12 | 0b01011 << 16)
    chip.clock.advance(chip.clock.now_ns + 11_000)
    assert [channel for _, channel in chip.adc.starts] == [1, 3, 0, 1, 3, 0]
    gaps = {after[0] - before[0] for before, after in zip(chip.adc.starts, chip.adc.starts[1:])}  # noqa: B905
    assert gaps == {2000}


def test_once_is_once_and_ready_tells(chip: Rp2040) -> None:
    chip.bus.write(ADC, 1)
    assert chip.bus.read(ADC) & 0x100
    chip.bus.write(ADC, 5)
    assert not chip.bus.read(ADC) & 0x100
    chip.clock.advance(chip.clock.now_ns + 10_000)
    assert chip.bus.read(ADC) & 0x100
    assert chip.adc.conversions == 1


# -- DMA (datasheet 2.5) -------------------------------------------------------------------


def _memory(chip: Rp2040, at: int, data: bytes) -> bytearray:
    buffer = bytearray(data)
    chip.memory.place(SRAM + at, len(buffer), lambda: buffer)
    return buffer


def _channel(chip: Rp2040, number: int, words: tuple[int, int, int, int]) -> None:
    for place, word in enumerate(words):
        chip.bus.write(DMA + 64 * number + 4 * place, word)


def test_dma_copies_chains_and_wraps(chip: Rp2040) -> None:
    _memory(chip, 0, bytes(range(32)))
    target = _memory(chip, 0x100, bytes(16))
    other = _memory(chip, 0x200, bytes(4))
    unpaced = 0x3F << 15 | 1
    # The second is triggered by the first as it ends; bytes, then words.
    chip.bus.write(DMA + 64 * 3, SRAM + 28)
    chip.bus.write(DMA + 64 * 3 + 4, SRAM + 0x200)
    chip.bus.write(DMA + 64 * 3 + 8, 1)
    chip.bus.write(DMA + 64 * 3 + 16, unpaced | 3 << 11 | 2 << 2)
    first = unpaced | 3 << 11 | 1 << 4 | 1 << 5 | 4 << 6 | 1 << 10  # a ring of 16 written bytes
    _channel(chip, 0, (SRAM, SRAM + 0x100, 20, first))
    assert chip.bus.read(DMA + 12) >> 24 & 1
    chip.clock.advance(chip.clock.now_ns + 10_000)
    assert bytes(target) == bytes([16, 17, 18, 19, *range(4, 16)])
    assert bytes(other) == bytes([28, 29, 30, 31])
    assert not chip.bus.read(DMA + 12) >> 24 & 1
    assert chip.bus.read(DMA + 0x400) == 0b1001


def test_pacing_timers_pace(chip: Rp2040) -> None:
    _memory(chip, 0, bytes(64))
    chip.bus.write(DMA + 0x42C, 1 << 16 | 125)  # TIMER3: one request in 125 cycles, 1 us
    control = 0x3E << 15 | 1 << 5 | 1
    _channel(chip, 0, (SRAM, SRAM, 40, control))
    at = chip.clock.now_ns
    chip.clock.advance(at + 20_500)
    assert 19 <= 40 - chip.bus.read(DMA + 8) <= 21


def test_requests_are_counted_and_can_be_forgotten(chip: Rp2040) -> None:
    buffer = _memory(chip, 0, bytes(16))
    control = 36 << 15 | 1 << 5 | 1 << 2  # DREQ_ADC, half words, not enabled yet
    chip.bus.write(DMA + 16, control)
    chip.bus.write(ADC + 8, 1 | 8 | 1 << 24)
    chip.bus.write(ADC, 1 | 8)
    chip.clock.advance(chip.clock.now_ns + 50_000)
    chip.bus.write(ADC, 1)
    chip.clock.advance(chip.clock.now_ns + 5000)
    while not chip.bus.read(ADC + 8) & 0x100:
        chip.bus.read(ADC + 12)
    assert chip.bus.read(DMA + 0x800) == 4, "the processor took what DMA was asked to take"
    chip.bus.write(DMA + 0x800, 0)
    _channel(chip, 0, (ADC + 12, SRAM, 8, control | 1))
    chip.clock.advance(chip.clock.now_ns + 5000)
    assert chip.bus.read(DMA + 8) == 8
    assert bytes(buffer) == bytes(16)


def test_a_channel_keeps_its_length_for_the_next_time(chip: Rp2040) -> None:
    _memory(chip, 0, bytes(8))
    chip.bus.write(DMA + 8, 5)
    assert chip.bus.read(DMA + 8) == 0, "the count is loaded as the channel is triggered"
    assert chip.bus.read(DMA + 0x804) == 5


# -- PIO (datasheet 3) ---------------------------------------------------------------------


@pytest.mark.parametrize("setting", [(4, 20_000, 700), (12, 2_000, 800), (100, 400, 50_000)])
def test_the_machine_steps_as_the_walk_does(setting: tuple[int, int, int]) -> None:
    """Two readings of the datasheet agree: this model on encoded words, pio_walk.py on the text."""
    board = Board(Loader(sources()))
    chip, parts = board.chip, Converters(board.chip)
    board.hal.use_converters(2, *setting)
    chip.bus.write(PIO1 + 0x2000, 0x101)
    chip.clock.advance(chip.clock.now_ns + 1000 * 7 * setting[0])
    codes = [(40503 * number + 12345, 30011 * number + 54321) for number in range(7)]
    walk = Walk(
        timing.plan(125, *setting), [(v & 0xFFFF, i & 0xFFFF) for v, i in codes], valid=0
    ).run()
    steps = [(rise - parts.rises_ns[0]) // 8 for rise in parts.rises_ns[:7]]
    assert steps == walk.rises
    assert chip.pios[1].machines[0].rx[:5] == walk.pushed[:5]


def _machine(chip: Rp2040, words: list[int], *, pinctrl: int = 0) -> None:
    for place, word in enumerate(words):
        chip.bus.write(PIO0 + 0x48 + 4 * place, word)
    chip.bus.write(PIO0 + 0xCC, (len(words) - 1) << 12)
    chip.bus.write(PIO0 + 0xDC, pinctrl)
    chip.bus.write(PIO0, 1)


def test_a_changed_join_flushes_and_deepens(chip: Rp2040) -> None:
    for word in range(6):
        chip.bus.write(PIO0 + 0x10, word)
    assert chip.bus.read(PIO0 + 0x0C) & 15 == 4
    assert chip.bus.read(PIO0 + 8) == 1 << 16  # TXOVER
    chip.bus.write(PIO0 + 0xD0 + 0x1000, 1 << 31)
    assert chip.bus.read(PIO0 + 0x0C) == 0
    assert chip.bus.read(PIO0 + 4) & 0x01010101 == 0x01010100  # TX both empty and full
    _machine(chip, [0x8020 | 0])  # push, blocking
    chip.clock.advance(chip.clock.now_ns + 1000)
    assert chip.bus.read(PIO0 + 0x0C) >> 4 & 15 == 8
    assert chip.bus.read(PIO0 + 8) & 1  # RXSTALL
    chip.bus.read(PIO0 + 0x20)
    chip.clock.advance(chip.clock.now_ns + 1000)
    assert chip.bus.read(PIO0 + 0x0C) >> 4 & 15 == 8


def test_push_without_blocking_drops_and_says_so(chip: Rp2040) -> None:
    _machine(chip, [0x8000])
    chip.clock.advance(chip.clock.now_ns + 100)
    assert chip.bus.read(PIO0 + 8) & 1
    assert chip.bus.read(PIO0 + 0x0C) >> 4 & 15 == 4
    chip.bus.write(PIO0, 0)
    chip.bus.write(PIO0 + 8, 1)
    assert chip.bus.read(PIO0 + 8) & 1 == 0


def test_restart_keeps_pc_and_scratch(chip: Rp2040) -> None:
    _machine(chip, [0xE02A, 0xE04B, 0x4021, 0x0003])  # set x 10; set y 11; in x 1; here for ever
    chip.clock.advance(chip.clock.now_ns + 1000)
    machine = chip.pios[0].machines[0]
    assert (machine.pc, machine.isr_count) == (3, 1)
    chip.bus.write(PIO0 + 0x2000, 0x10)
    assert (machine.pc, machine.x, machine.y, machine.isr_count) == (3, 10, 11, 0)
    chip.bus.write(PIO0 + 0xD8, 0)  # "jmp 0", at once
    assert machine.pc <= 1


def test_every_shift_is_what_the_datasheet_says() -> None:
    """IN and OUT in both directions, through x, against plain arithmetic."""
    some = random.Random(5)
    for _ in range(200):
        chip = Rp2040()
        word, bits = some.getrandbits(32), some.randrange(1, 33)
        right_in, right_out = some.randrange(2), some.randrange(2)
        machine = chip.pios[0].machines[0]
        machine.set_shiftctrl(right_out << 19 | right_in << 18)
        machine.osr, machine.isr = word, word ^ 0x5A5A5A5A
        machine.now(0x6020 | bits & 31)  # out x, bits
        low = (1 << bits) - 1
        assert machine.x == (word & low if right_out else word >> (32 - bits))
        before, source = machine.isr, machine.x
        machine.now(0x4020 | bits & 31)  # in x, bits
        value = source & low
        shifted = before >> bits | value << (32 - bits) if right_in else before << bits | value
        assert machine.isr == shifted & 0xFFFFFFFF


# -- pins (datasheet 2.3.1, 2.19) ----------------------------------------------------------


def test_a_pin_follows_the_function_that_has_it(chip: Rp2040) -> None:
    """A soft reset, or a changed function, leaves each side's level where it was."""
    chip.bus.write(SIO + 0x14, 1 << 2)
    chip.bus.write(SIO + 0x24, 1 << 2)
    assert chip.pins.driven(2) is None
    chip.bus.write(IO_BANK0 + 8 * 2 + 4, 5)
    assert chip.pins.driven(2) == 1
    chip.pios[0].put_pins(2, 1, 1, True)
    chip.bus.write(IO_BANK0 + 8 * 2 + 4, 6)
    assert chip.pins.driven(2) == 0
    chip.bus.write(IO_BANK0 + 8 * 2 + 4, 5)
    assert chip.pins.driven(2) == 1
    assert [level for _, pin, level in chip.pins.edges if pin == 2] == [1, 0, 1]


def test_pulls_decide_what_nobody_drives(chip: Rp2040) -> None:
    pin = FakeMachine(chip).Pin
    assert pin(5, pin.IN, pin.PULL_UP).value() == 1
    assert pin(5, pin.IN, pin.PULL_DOWN).value() == 0
    chip.pins.drive_from_outside(5, 1)
    assert pin(5).value() == 1


# -- clocks and the watchdog (datasheet 4.6, 4.7) ------------------------------------------


def test_the_low_half_latches_the_high_one(chip: Rp2040) -> None:
    chip.timer.set_us((1 << 32) - 1)
    low = chip.bus.read(TIMER + 0x0C)
    chip.clock.advance(chip.clock.now_ns + 5000)
    assert (chip.bus.read(TIMER + 0x08), low) == (0, 0xFFFFFFFF)
    assert chip.bus.read(TIMER + 0x24) == 1
    assert chip.bus.read(TIMER + 0x0C) < 10
    assert chip.bus.read(TIMER + 0x08) == 1


def test_the_watchdog_counts_two_a_microsecond_and_only_while_enabled(chip: Rp2040) -> None:
    chip.bus.write(WATCHDOG + 4, 2000)
    chip.clock.advance(chip.clock.now_ns + 5_000_000)
    chip.bus.write(WATCHDOG + 0x2000, 1 << 30)
    chip.clock.advance(chip.clock.now_ns + 600_000)
    assert 790 <= chip.bus.read(WATCHDOG) & 0xFFFFFF <= 800
    chip.bus.write(WATCHDOG + 0x3000, 1 << 30)
    chip.clock.advance(chip.clock.now_ns + 5_000_000)
    chip.bus.write(WATCHDOG + 0x18, 7)
    chip.bus.write(WATCHDOG + 0x2000, 1 << 30)
    with pytest.raises(BoardReset):
        chip.clock.advance(chip.clock.now_ns + 405_000)
    assert chip.bus.read(WATCHDOG + 8) == 1
    assert chip.bus.read(WATCHDOG + 0x18) == 7, "scratch registers outlive the reset"


def test_an_exception_in_a_timer_callback_ends_it_silently(chip: Rp2040) -> None:
    """MicroPython ports/rp2/machine_timer.c, alarm_callback; ends the earned pulse."""
    calls = []

    def callback(timer: object) -> None:
        calls.append(chip.clock.now_ns)
        if len(calls) == 3:
            raise ValueError

    FakeMachine(chip).Timer(-1).init(period=1, callback=callback, hard=True)
    chip.clock.sleep(10_000_000)
    assert len(calls) == 3


def test_interrupts_wait_while_they_are_off_and_none_is_lost(chip: Rp2040) -> None:
    machine = FakeMachine(chip)
    calls = []
    machine.Timer(-1).init(period=1, callback=lambda timer: calls.append(0), hard=True)
    state = machine.disable_irq()
    chip.clock.sleep(3_500_000)
    assert calls == []
    machine.enable_irq(state)
    assert len(calls) == 3
