"""The modules `rp2`, `select` and `sys` on the modelled chip.

Sources: MicroPython 1.28 ports/rp2/rp2_dma.c, rp2_pio.c; pico-sdk 2.2 hardware_pio/pio.c (programs
lie as high in the memory as they can; `pio_sm_init`) and hardware_dma/dma.c. For stdin and stdout:
ports/rp2/mphalport.c and shared/reference ("USB").
"""

from bus import Fault
from fake_machine import CALL_NS, choose_function
from pins_model import FUNCTION_PIO0
from pio_text import asm_pio
from rp2040_model import DMA, PIO0, PIO1

FIELDS = {  # of a channel's CTRL: place, bits
    "enable": (0, 1),
    "high_pri": (1, 1),
    "size": (2, 2),
    "inc_read": (4, 1),
    "inc_write": (5, 1),
    "ring_size": (6, 4),
    "ring_sel": (10, 1),
    "chain_to": (11, 4),
    "treq_sel": (15, 6),
    "irq_quiet": (21, 1),
    "bswap": (22, 1),
    "sniff_en": (23, 1),
}
UNPACED = 1 << 21 | 0x3F << 15 | 1 << 5 | 1 << 4 | 2 << 2 | 1
FJOIN_RX = 1 << 31


def dma_class(chip):
    claimed = []

    class DmaChannel:
        def __init__(self):
            self.channel = 0
            while self.channel in claimed:
                self.channel += 1
            claimed.append(self.channel)
            chip.finalisers.append(self.close)

        def pack_ctrl(self, **fields):
            value = UNPACED | self.channel << 11
            for name, given in fields.items():
                lsb, bits = FIELDS[name]
                if int(given) >> bits:
                    raise ValueError("bad field value")
                value = value & ~(((1 << bits) - 1) << lsb) | int(given) << lsb
            return value

        def close(self):
            base = DMA + 64 * self.channel
            for place in (0, 4, 8, 16):
                chip.bus.write(base + place, 0)
            chip.bus.write(DMA + 0x444, 1 << self.channel)
            claimed.remove(self.channel)

    return DmaChannel


class FakePio:
    """What `rp2.PIO(n)` gives."""

    def __init__(self, chip, number):
        self.chip = chip
        self.number = number

    def remove_program(self):
        self.chip.program_space[self.number] = 0

    def add(self, program):
        used = self.chip.program_space[self.number]
        length = len(program.words)
        mask = (1 << length) - 1
        offset = 32 - length
        while offset >= 0 and used & mask << offset:
            offset -= 1
        if offset < 0:
            raise OSError("no room for the program")
        base = (PIO0, PIO1)[self.number] + 0x48
        for place, word in enumerate(program.words):
            moved = word + offset if word >> 13 == 0 else word
            self.chip.bus.write(base + 4 * (offset + place), moved)
        self.chip.program_space[self.number] = used | mask << offset
        program.offset[self.number] = offset


def pio_class(chip):
    class PIO(FakePio):
        IN_LOW, IN_HIGH, OUT_LOW, OUT_HIGH = range(4)
        SHIFT_LEFT, SHIFT_RIGHT = 0, 1
        JOIN_NONE, JOIN_TX, JOIN_RX = 0, 1, 2

        def __init__(self, number):
            super().__init__(chip, number)

    return PIO


class StateMachine:
    def __init__(self, chip, number, program, how):
        self.chip = chip
        self.base = (PIO0, PIO1)[number // 4]
        self.at = self.base + 0xC8 + 0x18 * (number % 4)
        self.bit = 1 << number % 4
        pio = FakePio(chip, number // 4)
        chip.clock.spend(CALL_NS)
        chip.claimed_machines.add(number)
        if program.offset[pio.number] is None:
            pio.add(program)
        offset = program.offset[pio.number]
        self._init(number % 4, offset)
        self._configure(program, offset, how)
        for name in ("set", "sideset"):
            if how.get(name + "_base") is not None:
                self._take_pins(program.how[name + "_init"], how[name + "_base"].number, pio.number)

    def _init(self, number, offset):
        """pio_sm_init."""
        bus = self.chip.bus
        bus.write(self.base, bus.read(self.base) & ~self.bit)
        bus.write(self.at + 0x1000 + 8, FJOIN_RX)
        bus.write(self.at + 0x1000 + 8, FJOIN_RX)
        bus.write(self.base + 8, 0x01010101 << number)
        bus.write(self.base + 0x2000, self.bit << 4)
        bus.write(self.base + 0x2000, self.bit << 8)
        bus.write(self.at + 16, offset)

    def _configure(self, program, offset, how):
        """pio_sm_set_config."""
        told = program.how
        divider = 256
        if "freq" in how:
            divider = self.chip.freq_hz * 256 // how["freq"]
            if not 256 <= divider <= 65536 * 256:
                raise ValueError("freq out of range")
        execctrl = program.optional << 30
        execctrl |= (program.wrap + offset) << 12 | (program.wrap_target + offset) << 7
        shiftctrl = told.get("fifo_join", 0) << 30 | told.get("out_shiftdir", 0) << 19
        shiftctrl |= told.get("in_shiftdir", 0) << 18
        pinctrl = program.side_bits << 29
        for name, lsb in (("in_base", 15), ("sideset_base", 10), ("set_base", 5)):
            if how.get(name) is not None:
                pinctrl |= how[name].number << lsb
        if how.get("set_base") is not None:
            pinctrl |= 1 << 26
        for place, value in ((0, divider << 8), (4, execctrl), (8, shiftctrl), (20, pinctrl)):
            self.chip.bus.write(self.at + place, value & 0xFFFFFFFF)

    def _take_pins(self, start, pin, pio):
        """Level and direction by an instruction that the machine is made to execute, then the
        pin's function (pio_sm_set_pins_with_mask, pio_sm_set_pindirs_with_mask).
        """
        bus = self.chip.bus
        kept = bus.read(self.at + 20)
        for to, value in ((0, start & 1), (4, start >> 1)):
            bus.write(self.at + 20, 1 << 26 | pin << 5)
            bus.write(self.at + 16, 0xE000 | to << 5 | value)
        bus.write(self.at + 20, kept)
        choose_function(self.chip, pin, FUNCTION_PIO0 + pio)


class FakeRp2:
    def __init__(self, chip):
        self.chip = chip
        self.asm_pio = asm_pio
        self.DMA = dma_class(chip)
        self.PIO = pio_class(chip)

    def StateMachine(self, number, program, **how):
        return StateMachine(self.chip, number, program, how)


class Serial:
    """stdin, stdout and their poll: bytes that wait in `incoming`, bytes that went out in `sent`.

    `write` takes what there is `room` for and gives up, as after 500 ms without progress.
    """

    def __init__(self, clock):
        self.clock = clock
        self.incoming = bytearray()
        self.sent = bytearray()
        self.room = None
        self.asked = []  # of each readinto, how many bytes
        self.polls_ms = []

    def readinto(self, buffer):
        self.asked.append(len(buffer))
        if len(buffer) > len(self.incoming):
            raise Fault("readinto blocks for bytes that may never come")
        for place in range(len(buffer)):
            buffer[place] = self.incoming[0]
            self.incoming = self.incoming[1:]
        return len(buffer)

    def write(self, data):
        count = len(data) if self.room is None else min(self.room, len(data))
        self.sent.extend(data[:count])
        if self.room is not None:
            self.room -= count
        return count

    def register(self, stream, flags):
        self.stream, self.flags = stream, flags

    def ipoll(self, ms):
        self.polls_ms.append(ms)
        if not self.incoming:
            self.clock.sleep(1_000_000 * ms)
        return [(self.stream, 1)] if self.incoming else []


class Named:
    """A module, or an object, of these attributes."""

    def __init__(self, **names):
        for name, value in names.items():
            setattr(self, name, value)


def streams(serial):
    """(sys, select)"""
    stream = Named(buffer=serial)
    return Named(stdin=stream, stdout=stream), Named(POLLIN=1, poll=lambda: serial)
