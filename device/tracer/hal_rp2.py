"""The board: `Hal` on the registers of an RP2040 under MicroPython.

Comes in: calls of `hal.Hal`. Goes out: bits in registers. Thin: no decision is taken here. The
ring and its supervision are in `ring_rp2.py`, the converters in `adc_rp2.py` and `spi_pair.py`.
Registers carry the names of the RP2040 datasheet. Between `quiet_begin` and `quiet_end` the heap
is locked: an allocation would raise MemoryError.
"""

import gc
import os
import time
from array import array

import machine
import micropython
from machine import Pin
from micropython import const

from tracer import adc_rp2, hal, pulse_pio, ring_rp2
from tracer.coder_thumb import cobs_into
from tracer.plane_thumb import errors
from tracer.pulse_pio import BoundedPulse
from tracer.usb_serial import UsbSerial

# The pins of the reference board; the pulse pin is GP2, in pulse_pio.py. Every output is safe
# when low. Inputs are pulled so that a broken wire reads as the fault it would hide.
_RELAY = const(3)
_BLEED_RELEASE = const(4)
_STOP_LOOP = const(5)  # high = closed, pulled down
_REVERSED = const(6)  # high = reversed, pulled up
_ZERO_INPUT = const(7)  # high = voltage channel's input at its zero

_TIMER3 = const(0x5000042C)
_PIO1_CTRL_CLR = const(0x50303000)
_WATCHDOG_CTRL_CLR = const(0x4005B000)
_WATCHDOG_ENABLE_LSB = const(30)
_WATCHDOG_REASON = const(0x40058008)
_CHIP_RESET = const(0x40064008)
_HAD_RUN = const(0x10000)
_WATCHDOG_MAX_MS = 8388
_SOFT_RESET_MARK = 0x4B4E4545

micropython.alloc_emergency_exception_buf(100)

_words = ring_rp2.words
_quiet = array("I", (0,))


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
def _lock(quiet: ptr32):
    if quiet[0] == 0:
        quiet[0] = 1
        micropython.heap_lock()


@micropython.viper
def _unlock(quiet: ptr32):
    if quiet[0] == 1:
        quiet[0] = 0
        micropython.heap_unlock()


# A trip that the supervision has seen has ended the pulse, for good; between the look at it and the
# start of the wave no other may come.
@micropython.viper
def _pulse(words: ptr32, periods: int, origin: int):
    irq = machine.disable_irq()
    if periods <= 0 or int(ring_rp2.tripped(words)) != 0:
        pulse_pio.stop()
    else:
        pulse_pio.run(periods, origin)
    machine.enable_irq(irq)


class Hal(hal.Hal):
    """The reference board. A second object takes over from the first."""

    # Every flash chip has an id of its own; an emulated RP2040's has none.
    EMULATED = machine.unique_id() == bytes(8)

    ring = ring_rp2.ring  # type: ignore[assignment]

    cobs_into = staticmethod(cobs_into)  # type: ignore[assignment]
    errors = staticmethod(errors)  # type: ignore[assignment]

    def __init__(self):
        self._pulse = BoundedPulse(False)
        self._relay = Pin(_RELAY, Pin.OUT, value=0)
        self._release = Pin(_BLEED_RELEASE, Pin.OUT, value=0)
        self._stop_loop = Pin(_STOP_LOOP, Pin.IN, Pin.PULL_DOWN)
        self._reversed = Pin(_REVERSED, Pin.IN, Pin.PULL_UP)
        self._zero_input = Pin(_ZERO_INPUT, Pin.OUT, value=0)
        ring_rp2.supervise_end()
        adc_rp2.prepare()
        # A soft reset leaves the converter running, a former object may leave DMA and PIO running.
        adc_rp2.halt()
        machine.mem32[_PIO1_CTRL_CLR] = 1
        self._measure_with(adc_rp2)
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

    # -- converters ------------------------------------------------------------------

    def use_converters(self, kind, pair_us, clock_khz, convert_ns):
        self.capture_stop()
        if kind == hal.INTERNAL and pair_us == adc_rp2.PAIR_US:
            self._measure_with(adc_rp2)
        elif kind == hal.SPI16:
            from tracer import spi_pair

            spi_pair.prepare(pair_us, clock_khz, convert_ns)
            self._measure_with(spi_pair)
        else:
            raise ValueError("no such converters")

    def _measure_with(self, pairs):
        self._pairs = pairs
        self.PAIR_US = pairs.PAIR_US
        self.SKEW_NS = pairs.SKEW_NS
        self.CODE_BITS = pairs.CODE_BITS
        ring_rp2.feed(pairs.SOURCE, pairs.REQUEST, pairs.SIZE, pairs.GO, pairs.GO_BITS)
        ring_rp2.forget()

    def zero_input(self, on):
        self._zero_input.value(1 if on else 0)

    # -- outputs ---------------------------------------------------------------------

    def safe(self):
        pulse_pio.stop()
        self._relay.off()
        self._release.off()

    def relay(self, closed):
        self._relay.value(1 if closed else 0)

    def bleed(self, engaged):
        self._release.value(0 if engaged else 1)

    def use_contact(self, bare):
        self._pulse = BoundedPulse(bare)

    def pulse(self, us):
        pulse = self._pulse
        _pulse(_words, pulse.periods(us), pulse.origin)

    # -- inputs ----------------------------------------------------------------------

    def stop_loop_closed(self):
        return self._stop_loop.value() == 1

    def leads_reversed(self):
        return self._reversed.value() == 1

    def read(self, channel, count):
        pairs = adc_rp2 if channel == hal.CAPACITOR else self._pairs
        return pairs.total(channel, count)

    # -- capture ---------------------------------------------------------------------

    def capture_start(self):
        self._pairs.halt()
        ring_rp2.halt(_words)
        ring_rp2.arm(_words)
        self._pairs.arm()
        irq = machine.disable_irq()
        ring_rp2.begin(_words)
        machine.enable_irq(irq)

    def capture_began_us(self):
        return ring_rp2.began_us()

    def capture_written(self):
        return ring_rp2.written(_words)

    def capture_stop(self):
        if not ring_rp2.running():
            return False
        dropped = self._pairs.finish()
        ring_rp2.end(_words)
        ring_rp2.halt(_words)
        self._pairs.halt()
        return dropped != 0

    def supervise(self, voltage_trip_code, current_trip_code, breaks):
        ring_rp2.supervise(voltage_trip_code, current_trip_code, breaks)

    def supervision_ticks(self):
        return ring_rp2.ticks()

    def trips(self):
        return ring_rp2.trips()

    def trip_code(self):
        return ring_rp2.trip_code()

    def supervise_end(self):
        ring_rp2.supervise_end()

    def hang(self):
        while True:
            pass

    # -- time ------------------------------------------------------------------------

    def now_us(self):
        return ring_rp2.now_us()

    def ticks_us(self):
        return time.ticks_us()

    def wait_us(self, us):
        time.sleep_us(us)

    def bleed_wait(self, ms):
        self._link.wait(ms)

    def quiet_begin(self):
        # Not for the allocations alone: with the heap unlocked MicroPython looks for a place for
        # the frame of each larger function, which can take a millisecond on a full heap.
        gc.collect()
        _lock(_quiet)

    def quiet_end(self):
        _unlock(_quiet)

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
