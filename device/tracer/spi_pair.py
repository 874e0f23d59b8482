"""Two SPI converters of 16 bits, V and I, sampled at one instant and read by a PIO.

They share select and clock and have a data line each. The program on PIO1 makes the framing and
sorts the bits, so that each word is a pair, voltage in the low half, as from `adc_rp2.py`, whose
functions this module has. Imported only where the profile asks for it.

What it assumes of a converter, in the order of one pair, times at the RP2040's pins:

    select rises        V and I are sampled: at this edge, both; it comes every pair_us exactly
    select high         conversion; at least spi_convert_ns, and at least 104 cycles (sorting)
    select falls        clock is low; the highest bit is asked for
    clock falls         16 times; each asks for the next bit. The bit before has been read two
                        system cycles ahead of this edge (the PIO's input synchroniser), so a
                        converter has one clock period less two system cycles for each bit
    quiet               at least the clock's low and two cycles, until select rises again

Select high for longer than the conversion takes, and clock slower than it could be, do no harm.
Both codes are of the same instant and come in one word: there is no skew, and V and I cannot
swap. Where DMA comes late by more than eight pairs the PIO drops whole pairs, and `finish` tells.
A data line that is not connected reads 65535.
"""

import machine
import micropython
import rp2
from machine import Pin
from micropython import const

from tracer.spi_timing import loop, plan

TYPE_CHECKING = False
if TYPE_CHECKING:
    from rp2.asm_pio import (
        in_,
        isr,
        jmp,
        label,
        mov,
        noblock,
        nop,
        not_osre,
        null,
        osr,
        out,
        pins,
        push,
        reverse,
        set,
        wrap,
        wrap_target,
        x,
        x_dec,
        y,
    )

SKEW_NS = 0
CODE_BITS = 16

# What DMA is told: the FIFO's address, DREQ_PIO1_RX0, words; and the write that starts.
SOURCE = 0x50300020
REQUEST = 12
SIZE = 2
GO = 0x50302000
_GO_BITS = const(0x101)  # CTRL: SM_ENABLE, CLKDIV_RESTART
GO_BITS = _GO_BITS

_SELECT = const(10)
_CLOCK = const(11)
_DATA = (12, 13)  # voltage, current

# PIO1, state machine 0, in words; the aliases at +0x1000, +0x2000, +0x3000 flip, set, clear bits.
_MACHINE = const(4)
_PIO1 = const(0x50300000)
_PIO1_XOR = const(0x50301000)
_PIO1_SET = const(0x50302000)
_PIO1_CLR = const(0x50303000)
_CTRL = const(0)
_FSTAT = const(1)
_FDEBUG = const(2)
_RXF0 = const(8)
_SM0_SHIFTCTRL = const(52)
_SM0_INSTR = const(54)
_SM0_CLKDIV_AT = const(0x503000C8)
_SM0_ADDR_AT = const(0x503000D4)
_SM_ENABLE = const(1)
_SM_RESTART = const(16)
_RXEMPTY = const(0x100)
_RXSTALL = const(1)
_FJOIN_RX_BIT = const(31)
_SET_SELECT_LOW = const(0xE000)  # "set pins, 0" with the clock low

PAIR_US = 0
_origin = 0


def _program(high, low, hold, quiet):
    """Assembled for these numbers of cycles; `hold` and `quiet` as from `loop`. 25 instructions.

    Each `in pins` takes both lines: after 16 of them ISR holds I15 V15 I14 V14 ... I0 V0. In
    reverse order, from the low end, each second bit goes back into ISR: first I, then V.
    """
    hold_first, hold_rounds, hold_each = hold
    quiet_first, quiet_rounds, quiet_each = quiet

    @rp2.asm_pio(
        set_init=rp2.PIO.OUT_LOW,
        sideset_init=rp2.PIO.OUT_LOW,
        in_shiftdir=rp2.PIO.SHIFT_LEFT,
        out_shiftdir=rp2.PIO.SHIFT_RIGHT,
        fifo_join=rp2.PIO.JOIN_RX,
    )
    def pair():
        set(pins, 1).side(0)  # the first pair is sampled; nothing to sort, but as long a time
        set(x, 10).side(0)
        label("first")
        jmp(x_dec, "first").side(0)[8]
        jmp("hold").side(0)
        wrap_target()
        set(pins, 1).side(0)  # sampled
        mov(y, reverse(isr)).side(0)
        mov(osr, y).side(0)
        label("current")
        in_(osr, 1).side(0)
        out(null, 2).side(0)
        jmp(not_osre, "current").side(0)
        mov(osr, y).side(0)
        out(null, 1).side(0)
        label("voltage")
        in_(osr, 1).side(0)
        out(null, 2).side(0)
        jmp(not_osre, "voltage").side(0)
        push(noblock).side(0)
        label("hold")
        set(x, hold_rounds).side(0)[hold_first]
        label("holding")
        jmp(x_dec, "holding").side(0)[hold_each]
        set(pins, 0).side(0)
        set(x, 15).side(0)[low - 2]
        label("bit")
        nop().side(1)[high - 1]
        in_(pins, 2).side(0)[low - 2]
        jmp(x_dec, "bit").side(0)
        set(x, quiet_rounds).side(0)[quiet_first]
        label("quiet")
        jmp(x_dec, "quiet").side(0)[quiet_each]
        wrap()

    return pair


def prepare(pair_us, clock_khz, convert_ns):
    """Take the pins, load the program. ValueError where `plan` finds no way."""
    global PAIR_US, _origin
    if machine.freq() % 1000000:
        raise ValueError("no whole number of cycles in a microsecond")
    mhz = machine.freq() // 1000000
    divider, high, low, hold, quiet = plan(mhz, pair_us, clock_khz, convert_ns)
    for gpio in _DATA:
        Pin(gpio, Pin.IN, Pin.PULL_UP)
    rp2.PIO(1).remove_program()
    rp2.StateMachine(
        _MACHINE,
        _program(high, low, loop(hold), loop(quiet)),
        in_base=Pin(_DATA[0]),
        set_base=Pin(_SELECT),
        sideset_base=Pin(_CLOCK),
    )
    machine.mem32[_SM0_CLKDIV_AT] = divider << 16
    _origin = machine.mem32[_SM0_ADDR_AT] & 31
    PAIR_US = pair_us
    halt()


@micropython.viper
def halt():
    """The state machine stands still, its FIFO is empty."""
    ptr32(_PIO1_CLR)[_CTRL] = _SM_ENABLE
    flip = ptr32(_PIO1_XOR)
    fjoin_rx = 1  # shifted at run time: viper has no literal above 30 bits
    fjoin_rx = fjoin_rx << _FJOIN_RX_BIT
    flip[_SM0_SHIFTCTRL] = fjoin_rx  # a change of this bit flushes both FIFOs
    flip[_SM0_SHIFTCTRL] = fjoin_rx
    ptr32(_PIO1)[_FDEBUG] = _RXSTALL


@micropython.viper
def _to_start(origin: int):
    ptr32(_PIO1_SET)[_CTRL] = _SM_RESTART
    pio = ptr32(_PIO1)
    pio[_SM0_INSTR] = _SET_SELECT_LOW
    pio[_SM0_INSTR] = origin  # "jmp origin" with the clock low


def arm():
    """After `halt`: the next thing to happen is that select rises."""
    _to_start(_origin)


@micropython.viper
def finish() -> int:
    """Stop, let DMA fetch the last pairs; not 0 where a pair was dropped."""
    ptr32(_PIO1_CLR)[_CTRL] = _SM_ENABLE
    pio = ptr32(_PIO1)
    spins = 100
    while pio[_FSTAT] & _RXEMPTY == 0 and spins > 0:
        spins -= 1
    return pio[_FDEBUG] & _RXSTALL


@micropython.viper
def _total(shift: int, count: int) -> int:
    pio = ptr32(_PIO1)
    ptr32(_PIO1_SET)[_CTRL] = _GO_BITS
    total = 0
    taken = -1  # the first conversion may be from before the converters had rest
    while taken < count:
        while pio[_FSTAT] & _RXEMPTY:
            pass
        code = (pio[_RXF0] >> shift) & 0xFFFF
        if taken >= 0:
            total += code
        taken += 1
    return total


def total(channel, count):
    """Sum of `count` conversions of V (0) or I (1)."""
    halt()
    arm()
    found = _total(16 * channel, count)
    halt()
    return found
