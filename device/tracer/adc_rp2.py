"""The RP2040's own converter: V and I in turn, 2 us each, 12 bits; or one channel alone.

Comes in: when to start, for a capture (`arm`, then a write of GO_BITS to GO) or a sum (`total`).
Goes out: codes, as half words at SOURCE for DMA, voltage first. A full FIFO drops a conversion,
and V and I have swapped from there on: `finish` tells. `spi_pair.py` has the same functions.
"""

import machine
import micropython
from micropython import const

PAIR_US = 4
SKEW_NS = 2000
CODE_BITS = 12

# What DMA is told: the FIFO's address, DREQ_ADC, half words; and the write that starts.
SOURCE = 0x4004C00C
REQUEST = 36
SIZE = 1
GO = 0x4004E000
GO_BITS = 8  # CS.START_MANY

_GPIO = (26, 27, 28)  # voltage, current, capacitor: channels 0, 1, 2

# In words from the base. The alias at +0x2000 sets bits, the one at +0x3000 clears them.
_ADC = const(0x4004C000)
_ADC_SET = const(0x4004E000)
_ADC_CLR = const(0x4004F000)
_CS = const(0)
_FCS = const(2)
_FIFO = const(3)
_DIV = const(4)
_CS_EN = const(1)
_CS_START_MANY = const(8)
_CS_READY = const(0x100)
_CS_AINSEL_LSB = const(12)
_CS_RROBIN_V_I = const(0x30000)
_FCS_EN = const(1)
_FCS_DREQ_EN = const(8)
_FCS_EMPTY = const(0x100)
_FCS_UNDER_OVER = const(0xC00)  # written as ones to clear
_FCS_OVER_LSB = const(11)
_FCS_THRESH_1 = const(0x1000000)


def prepare():
    """Power for the converter, its pads without their digital side."""
    for gpio in _GPIO:
        machine.ADC(gpio)


@micropython.viper
def halt():
    """No conversion under way, none to come, FIFO empty and off, DREQ off."""
    adc = ptr32(_ADC)
    ptr32(_ADC_CLR)[_CS] = _CS_START_MANY
    while adc[_CS] & _CS_READY == 0:
        pass
    adc[_FCS] = _FCS_UNDER_OVER
    while adc[_FCS] & _FCS_EMPTY == 0:
        dropped = adc[_FIFO]  # noqa: F841
    adc[_CS] = _CS_EN
    adc[_DIV] = 0


@micropython.viper
def arm():
    """After `halt`: ready for pairs."""
    adc = ptr32(_ADC)
    adc[_FCS] = _FCS_EN | _FCS_DREQ_EN | _FCS_UNDER_OVER | _FCS_THRESH_1
    adc[_CS] = _CS_EN | _CS_RROBIN_V_I  # AINSEL = 0: voltage comes first


@micropython.viper
def finish() -> int:
    """Stop, let DMA fetch the last codes; not 0 where a conversion was dropped."""
    adc = ptr32(_ADC)
    ptr32(_ADC_CLR)[_CS] = _CS_START_MANY
    while adc[_CS] & _CS_READY == 0:
        pass
    spins = 100
    while adc[_FCS] & _FCS_EMPTY == 0 and spins > 0:
        spins -= 1
    return (adc[_FCS] >> _FCS_OVER_LSB) & 1


@micropython.viper
def _total(channel: int, count: int) -> int:
    adc = ptr32(_ADC)
    adc[_FCS] = _FCS_EN | _FCS_UNDER_OVER
    adc[_CS] = _CS_EN | channel << _CS_AINSEL_LSB
    ptr32(_ADC_SET)[_CS] = _CS_START_MANY
    total = 0
    taken = -1  # the first conversion still holds charge of the channel before
    while taken < count:
        while adc[_FCS] & _FCS_EMPTY:
            pass
        code = adc[_FIFO]
        if taken >= 0:
            total += code
        taken += 1
    return total


def total(channel, count):
    """Sum of `count` conversions of channel 0, 1 or 2."""
    found = _total(channel, count)
    halt()
    return found
