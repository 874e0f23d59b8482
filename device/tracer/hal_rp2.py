"""The board: `Hal` on the registers of an RP2040 under MicroPython.

Comes in: calls of `hal.Hal`. Goes out: bits in registers. Thin: no decision is taken here.
Registers carry the names of the RP2040 datasheet. Between `quiet_begin` and `quiet_end` the heap
is locked: an allocation would raise MemoryError.

What DMA and the timer interrupt touch (the ring, `_words`, the DMA channel) belongs to this
module and not to a `Hal` object, so a dropped object cannot hand the ring's memory back while
DMA still writes to it. Import this module early: the ring needs 32 KiB in one piece, of which
alignment wastes half.
"""

import gc
import os
import time
from array import array

import machine
import micropython
import rp2
import uctypes
from machine import Pin
from micropython import const

from tracer import hal
from tracer.coder_thumb import cobs_into
from tracer.fold_thumb import fold_units
from tracer.pulse_pio import BoundedPulse
from tracer.usb_serial import UsbSerial

# The pins of the reference board; the pulse pin is GP2, in pulse_pio.py. Every output is safe
# when low. Inputs are pulled so that a broken wire reads as the fault it would hide.
_RELAY = const(3)
_BLEED_RELEASE = const(4)
_STOP_LOOP = const(5)  # high = closed, pulled down
_REVERSED = const(6)  # high = reversed, pulled up
_ANALOGUE = (26, 27, 28)  # voltage, current, capacitor: ADC channels 0, 1, 2

# ADC, in words from its base. The alias at +0x2000 sets bits, the one at +0x3000 clears them.
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

# DMA, in words from a channel's base.
_DMA = const(0x50000000)
_CHAN_ABORT = const(0x50000444)
_TIMER3 = const(0x5000042C)
_READ_ADDR = const(0)
_WRITE_ADDR = const(1)
_TRANS_COUNT = const(2)
_CTRL_TRIG = const(3)
_AL1_CTRL = const(4)
_DREQ_ADC = const(36)
_DMA_EN = const(1)
_COUNT_BITS = const(31)  # 2**31 transfers = 2**30 pairs = 71 minutes

_TIMERAW = const(0x40054024)  # TIMERAWH, TIMERAWL
_GPIO_IN = const(0xD0000004)
_WATCHDOG_CTRL_CLR = const(0x4005B000)
_WATCHDOG_ENABLE_LSB = const(30)
_WATCHDOG_REASON = const(0x40058008)
_CHIP_RESET = const(0x40064008)
_HAD_RUN = const(0x10000)
_WATCHDOG_MAX_MS = 8388
_SOFT_RESET_MARK = 0x4B4E4545

_RING_BITS = const(14)
_RING_MASK = const(4095)  # pairs

# Words shared with the interrupt.
_W_TICKS = const(0)
_W_TRIPS = const(1)
_W_VOLTAGE_TRIP = const(2)
_W_CURRENT_TRIP = const(3)
_W_RUNNING = const(4)
_W_WRITTEN = const(5)  # pairs of the last capture, once it has stopped
_W_DMA = const(6)
_W_DMA_CTRL = const(7)
_W_CHANNEL = const(8)
_W_RING = const(9)
_W_TIME_HIGH = const(10)
_W_TIME_LOW = const(11)
_W_BEGAN_HIGH = const(12)
_W_BEGAN_LOW = const(13)
_W_QUIET = const(14)
_WORDS = const(15)

micropython.alloc_emergency_exception_buf(100)

_store = bytearray((2 << _RING_BITS) - 1)
_ring_at = (uctypes.addressof(_store) + (1 << _RING_BITS) - 1) & -(1 << _RING_BITS)
_channel = rp2.DMA()
_number = _channel.channel  # type: ignore[attr-defined]  # documented, not in the stubs
_timer = machine.Timer(-1)
_words = array("I", bytes(4 * _WORDS))
_words[_W_DMA] = _DMA + 64 * _number
_words[_W_CHANNEL] = _number
_words[_W_RING] = _ring_at
_words[_W_DMA_CTRL] = _channel.pack_ctrl(
    size=1,
    inc_read=False,
    inc_write=True,
    ring_size=_RING_BITS,
    ring_sel=True,
    treq_sel=_DREQ_ADC,
    irq_quiet=True,
    high_pri=True,
    chain_to=_number,
    enable=True,
)


@micropython.viper
def _adc_halt():
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
def _dma_halt(words: ptr32):
    dma = ptr32(words[_W_DMA])
    dma[_AL1_CTRL] = words[_W_DMA_CTRL] - _DMA_EN  # before the abort: erratum RP2040-E13
    bit = 1 << words[_W_CHANNEL]
    ptr32(_CHAN_ABORT)[0] = bit
    while ptr32(_CHAN_ABORT)[0] & bit:
        pass


@micropython.viper
def _time(words: ptr32):
    raw = ptr32(_TIMERAW)
    high = raw[0]
    low = raw[1]
    while raw[0] != high:
        high = raw[0]
        low = raw[1]
    words[_W_TIME_HIGH] = high
    words[_W_TIME_LOW] = low


@micropython.viper
def _arm_capture(words: ptr32):
    adc = ptr32(_ADC)
    adc[_FCS] = _FCS_EN | _FCS_DREQ_EN | _FCS_UNDER_OVER | _FCS_THRESH_1
    dma = ptr32(words[_W_DMA])
    dma[_READ_ADDR] = int(ptr32(_ADC)) + 4 * _FIFO
    dma[_WRITE_ADDR] = words[_W_RING]
    one = 1
    dma[_TRANS_COUNT] = one << _COUNT_BITS
    dma[_CTRL_TRIG] = words[_W_DMA_CTRL]
    adc[_CS] = _CS_EN | _CS_RROBIN_V_I  # AINSEL = 0: voltage comes first


@micropython.viper
def _begin_capture(words: ptr32):
    raw = ptr32(_TIMERAW)
    many = ptr32(_ADC_SET)
    high = raw[0]
    low = raw[1]
    many[_CS] = _CS_START_MANY
    if raw[0] != high and low >= 0:
        high = raw[0]  # the carry came between the two reads
    words[_W_BEGAN_HIGH] = high
    words[_W_BEGAN_LOW] = low
    words[_W_RUNNING] = 1


@micropython.viper
def _written(words: ptr32) -> int:
    if words[_W_RUNNING] == 0:
        return words[_W_WRITTEN]
    one = uint(1)
    done = (one << _COUNT_BITS) - uint(ptr32(words[_W_DMA])[_TRANS_COUNT])
    return int((done >> 1) & 0x3FFFFFFF)


@micropython.viper
def _end_capture(words: ptr32) -> int:
    adc = ptr32(_ADC)
    ptr32(_ADC_CLR)[_CS] = _CS_START_MANY
    while adc[_CS] & _CS_READY == 0:
        pass
    spins = 100
    while adc[_FCS] & _FCS_EMPTY == 0 and spins > 0:  # DMA fetches the last codes
        spins -= 1
    words[_W_WRITTEN] = int(_written(words))
    words[_W_RUNNING] = 0
    return (adc[_FCS] >> _FCS_OVER_LSB) & 1


@micropython.viper
def _sum(channel: int, count: int) -> int:
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


@micropython.viper
def _supervise(timer):
    """The 1 kHz visit, in interrupt context: about 10 us on an emulated RP2040."""
    words = ptr32(_words)
    words[_W_TICKS] = (words[_W_TICKS] + 1) & 0x3FFFFFFF
    trips = words[_W_TRIPS]  # the bits are hal.TRIP_STOP_LOOP, _OVER_VOLTAGE, _OVER_CURRENT
    if ptr32(_GPIO_IN)[0] & (1 << _STOP_LOOP) == 0:
        trips |= 1
    if words[_W_RUNNING]:
        one = uint(1)
        done = (one << _COUNT_BITS) - uint(ptr32(words[_W_DMA])[_TRANS_COUNT])
        pairs = int((done >> 1) & 0x3FFFFFFF)
        if pairs > 0:
            ring = ptr16(words[_W_RING])
            at = 2 * ((pairs - 1) & _RING_MASK)
            if ring[at] >= words[_W_VOLTAGE_TRIP]:
                trips |= 2
            if ring[at + 1] >= words[_W_CURRENT_TRIP]:
                trips |= 4
    words[_W_TRIPS] = trips


@micropython.viper
def _watchdog_off():
    one = 1
    ptr32(_WATCHDOG_CTRL_CLR)[0] = one << _WATCHDOG_ENABLE_LSB


def _find_reset_cause():
    # DMA's pacing timer 3 is used by nobody and survives only a soft reset.
    soft = machine.mem32[_TIMER3] == _SOFT_RESET_MARK
    machine.mem32[_TIMER3] = _SOFT_RESET_MARK
    reason = machine.mem32[_WATCHDOG_REASON]
    if soft or reason & 2:  # `machine.reset()` forces the watchdog's reset
        return hal.RESET_SOFT
    if reason & 1:
        return hal.RESET_WATCHDOG
    if machine.mem32[_CHIP_RESET] & _HAD_RUN:
        return hal.RESET_PIN
    return hal.RESET_POWER_ON


_reset_cause = _find_reset_cause()


# Ctrl-C is not delivered inside native code, so the mark and the lock cannot come apart: an
# unlock too many would lock the heap for good.
@micropython.viper
def _lock(words: ptr32):
    if words[_W_QUIET] == 0:
        words[_W_QUIET] = 1
        micropython.heap_lock()


@micropython.viper
def _unlock(words: ptr32):
    if words[_W_QUIET] == 1:
        words[_W_QUIET] = 0
        micropython.heap_unlock()


class Hal(hal.Hal):
    """The reference board. A second object takes over from the first."""

    # Every flash chip has an id of its own; an emulated RP2040's has none.
    EMULATED = machine.unique_id() == bytes(8)

    ring = uctypes.bytearray_at(_ring_at, 1 << _RING_BITS)  # type: ignore[assignment]

    fold_units = staticmethod(fold_units)  # type: ignore[assignment]
    cobs_into = staticmethod(cobs_into)  # type: ignore[assignment]

    def __init__(self):
        self._pulse = BoundedPulse()
        self._relay = Pin(_RELAY, Pin.OUT, value=0)
        self._release = Pin(_BLEED_RELEASE, Pin.OUT, value=0)
        self._stop_loop = Pin(_STOP_LOOP, Pin.IN, Pin.PULL_DOWN)
        self._reversed = Pin(_REVERSED, Pin.IN, Pin.PULL_UP)
        _timer.deinit()
        for gpio in _ANALOGUE:
            machine.ADC(gpio)  # powers the converter, takes the pad's digital side off
        # A soft reset leaves the converter running, a former object may leave DMA running.
        _adc_halt()
        _dma_halt(_words)
        _words[_W_RUNNING] = 0
        _words[_W_WRITTEN] = 0
        self._link = UsbSerial()
        self._wdt = None
        self._watchdog_ms = 0

    # -- identity --------------------------------------------------------------------

    def device_id(self):
        return machine.unique_id()

    def reset_cause(self):
        return _reset_cause

    def random32(self):
        return int.from_bytes(os.urandom(4), "little")

    # -- outputs ---------------------------------------------------------------------

    def safe(self):
        self._pulse.stop()
        self._relay.off()
        self._release.off()

    def relay(self, closed):
        self._relay.value(1 if closed else 0)

    def bleed(self, engaged):
        self._release.value(0 if engaged else 1)

    def pulse(self, us):
        self._pulse.run(us)

    # -- inputs ----------------------------------------------------------------------

    def stop_loop_closed(self):
        return self._stop_loop.value() == 1

    def leads_reversed(self):
        return self._reversed.value() == 1

    def read(self, channel, count):
        total = _sum(channel, count)
        _adc_halt()
        return total

    # -- capture ---------------------------------------------------------------------

    def capture_start(self):
        _adc_halt()
        _dma_halt(_words)
        _arm_capture(_words)
        irq = machine.disable_irq()
        _begin_capture(_words)
        machine.enable_irq(irq)

    def capture_began_us(self):
        return _words[_W_BEGAN_HIGH] << 32 | _words[_W_BEGAN_LOW]

    def capture_written(self):
        return _written(_words)

    def capture_stop(self):
        if not _words[_W_RUNNING]:
            return False
        over = _end_capture(_words)
        _dma_halt(_words)
        _adc_halt()
        return over == 1

    def supervise(self, voltage_trip_code, current_trip_code):
        _timer.deinit()
        _words[_W_TICKS] = 0
        _words[_W_TRIPS] = 0
        _words[_W_VOLTAGE_TRIP] = voltage_trip_code
        _words[_W_CURRENT_TRIP] = current_trip_code
        _timer.init(period=1, mode=machine.Timer.PERIODIC, callback=_supervise, hard=True)

    def supervision_ticks(self):
        return _words[_W_TICKS]

    def trips(self):
        return _words[_W_TRIPS]

    def supervise_end(self):
        _timer.deinit()

    # -- time ------------------------------------------------------------------------

    def now_us(self):
        _time(_words)
        return _words[_W_TIME_HIGH] << 32 | _words[_W_TIME_LOW]

    def wait_us(self, us):
        time.sleep_us(us)

    def bleed_wait(self, ms):
        self._link.wait(ms)

    def quiet_begin(self):
        # Not for the allocations alone: with the heap unlocked MicroPython looks for a place for
        # the frame of each larger function, which can take a millisecond on a full heap.
        gc.collect()
        _lock(_words)

    def quiet_end(self):
        _unlock(_words)

    def watchdog(self, ms):
        """As in `hal.Hal`; at most 8388 ms. MicroPython itself has no way to stop it."""
        if not ms:
            _watchdog_off()
            self._watchdog_ms = 0
        elif ms == self._watchdog_ms:
            self._wdt.feed()
        else:
            self._wdt = machine.WDT(timeout=min(ms, _WATCHDOG_MAX_MS))
            self._watchdog_ms = ms

    # -- link ------------------------------------------------------------------------

    def link_wait(self, ms):
        self._link.wait(ms)

    def link_read(self, buffer):
        return self._link.read(buffer)

    def link_write(self, data):
        return self._link.write(data)
