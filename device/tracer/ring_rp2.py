"""The ring of pairs on an RP2040: its memory, the DMA that fills it, the 1 kHz supervision.

Comes in: what DMA reads and at whose request (`feed`), and the one register write that sets the
converters going. Goes out: pairs in `ring`, how many, since when, and what tripped. Which
converters these are is not known here: see `adc_rp2.py` and `spi_pair.py`. Registers carry the
names of the RP2040 datasheet.

What DMA and the timer interrupt touch belongs to this module and not to a `Hal` object, so a
dropped object cannot hand the ring's memory back while DMA still writes to it. Import this module
early: the ring is 16 KiB, aligned to its size, of a heap that is still in one piece.
"""

import gc
from array import array

import machine
import micropython
import rp2
import uctypes
from micropython import const

from tracer.pulse_pio import stop

# DMA, in words from a channel's base.
_DMA = const(0x50000000)
_CHAN_ABORT = const(0x50000444)
_READ_ADDR = const(0)
_WRITE_ADDR = const(1)
_TRANS_COUNT = const(2)
_CTRL_TRIG = const(3)
_AL1_CTRL = const(4)
_DBG_CTDREQ = const(512)
_DMA_EN = const(1)
_COUNT_BITS = const(31)  # 2**31 transfers: at 2 us each 71 minutes

_TIMERAW = const(0x40054024)  # TIMERAWH, TIMERAWL
_GPIO_IN = const(0xD0000004)
_STOP_LOOP = const(5)  # its pin; high = closed

_RING_BITS = const(14)
_RING_BYTES = const(1 << 14)
_RING_MASK = const(4095)  # pairs
_PLACES = const(8)

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
_W_SOURCE = const(14)
_W_SHIFT = const(15)  # transfers of a pair, as a power of two
_W_GO = const(16)  # address of the write that sets the converters going
_W_GO_BITS = const(17)
_W_BREAKS = const(18)  # 1: a trip ends the pulse at once
_W_TRIP_CODE = const(19)  # the code that tripped
_WORDS = const(20)


def _aligned():
    """A buffer of the ring's size, aligned to it."""
    # Before the first place that is long enough for the ring, fill up to the next aligned one.
    # A filler that finds a hole further ahead has filled that: look again.
    fillers = []
    for _ in range(_PLACES):
        found = bytearray(_RING_BYTES)
        gap = -uctypes.addressof(found) & (_RING_BYTES - 1)
        if not gap:
            return found
        found = None
        gc.collect()
        fillers.append(bytearray(gap))
    fillers = None
    gc.collect()
    store = bytearray(2 * _RING_BYTES - 1)  # twice as much always holds an aligned one
    at = uctypes.addressof(store) + _RING_BYTES - 1 & -_RING_BYTES
    return uctypes.bytearray_at(at, _RING_BYTES), store


_held = _aligned()
ring = _held if isinstance(_held, bytearray) else _held[0]
timer = machine.Timer(-1)
words = array("I", bytes(4 * _WORDS))
_channel = rp2.DMA()
_number = _channel.channel  # type: ignore[attr-defined]  # documented, not in the stubs
words[_W_DMA] = _DMA + 64 * _number
words[_W_CHANNEL] = _number
words[_W_RING] = uctypes.addressof(ring)
gc.collect()  # the fillers


def feed(source, request, size, go, go_bits):
    """From now on DMA moves `size` (1: half words, 2: words) from the address `source` at each
    `request`; writing `go_bits` to the address `go` sets the converters going.
    """
    words[_W_SOURCE] = source
    words[_W_SHIFT] = 2 - size
    words[_W_GO] = go
    words[_W_GO_BITS] = go_bits
    words[_W_DMA_CTRL] = _channel.pack_ctrl(
        size=size,
        inc_read=False,
        inc_write=True,
        ring_size=_RING_BITS,
        ring_sel=True,
        treq_sel=request,
        irq_quiet=True,
        high_pri=True,
        chain_to=_number,
        enable=True,
    )


def forget():
    """No capture, and none before."""
    halt(words)
    words[_W_RUNNING] = 0
    words[_W_WRITTEN] = 0


@micropython.viper
def halt(words: ptr32):
    """DMA stands still."""
    dma = ptr32(words[_W_DMA])
    dma[_AL1_CTRL] = words[_W_DMA_CTRL] - _DMA_EN  # before the abort: erratum RP2040-E13
    bit = 1 << words[_W_CHANNEL]
    ptr32(_CHAN_ABORT)[0] = bit
    while ptr32(_CHAN_ABORT)[0] & bit:
        pass


@micropython.viper
def arm(words: ptr32):
    """DMA waits for the converters, to fill the ring from its first place."""
    dma = ptr32(words[_W_DMA])
    dma[_DBG_CTDREQ] = 0  # requests of before, whose codes have been thrown away
    dma[_READ_ADDR] = words[_W_SOURCE]
    dma[_WRITE_ADDR] = words[_W_RING]
    one = 1
    dma[_TRANS_COUNT] = one << _COUNT_BITS
    dma[_CTRL_TRIG] = words[_W_DMA_CTRL]


@micropython.viper
def begin(words: ptr32):
    """Set the converters going, and note when. Interrupts are off."""
    raw = ptr32(_TIMERAW)
    go = ptr32(words[_W_GO])
    bits = words[_W_GO_BITS]
    high = raw[0]
    low = raw[1]
    go[0] = bits
    if raw[0] != high and low >= 0:
        high = raw[0]  # the carry came between the two reads
    words[_W_BEGAN_HIGH] = high
    words[_W_BEGAN_LOW] = low
    words[_W_RUNNING] = 1


@micropython.viper
def written(words: ptr32) -> int:
    """Pairs since `begin`, modulo 2**30; after `end` those of the capture that ended."""
    if words[_W_RUNNING] == 0:
        return words[_W_WRITTEN]
    one = uint(1)
    done = (one << _COUNT_BITS) - uint(ptr32(words[_W_DMA])[_TRANS_COUNT])
    return int((done >> words[_W_SHIFT]) & 0x3FFFFFFF)


@micropython.viper
def end(words: ptr32):
    """Keep the count. The converters stand still, and DMA has fetched their last codes."""
    words[_W_WRITTEN] = int(written(words))
    words[_W_RUNNING] = 0


def running():
    return words[_W_RUNNING] == 1


def began_us():
    return words[_W_BEGAN_HIGH] << 32 | words[_W_BEGAN_LOW]


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


def now_us():
    _time(words)
    return words[_W_TIME_HIGH] << 32 | words[_W_TIME_LOW]


@micropython.viper
def visit(timer):
    """The 1 kHz visit, in interrupt context: about 10 us on an emulated RP2040."""
    told = ptr32(words)
    told[_W_TICKS] = (told[_W_TICKS] + 1) & 0x3FFFFFFF
    trips = told[_W_TRIPS]  # the bits are hal.TRIP_STOP_LOOP, _OVER_VOLTAGE, _OVER_CURRENT
    if ptr32(_GPIO_IN)[0] & (1 << _STOP_LOOP) == 0:
        trips |= 1
    if told[_W_RUNNING]:
        one = uint(1)
        done = (one << _COUNT_BITS) - uint(ptr32(told[_W_DMA])[_TRANS_COUNT])
        pairs = int((done >> told[_W_SHIFT]) & 0x3FFFFFFF)
        if pairs > 1 and trips & 6 == 0:
            # Two pairs in a row: a single one may be noise.
            codes = ptr16(told[_W_RING])
            at = 2 * ((pairs - 1) & _RING_MASK)
            before = 2 * ((pairs - 2) & _RING_MASK)
            trip = told[_W_VOLTAGE_TRIP]
            if codes[at] >= trip and codes[before] >= trip:
                told[_W_TRIP_CODE] = codes[at]
                trips |= 2
            trip = told[_W_CURRENT_TRIP]
            if trips & 2 == 0 and codes[at + 1] >= trip and codes[before + 1] >= trip:
                told[_W_TRIP_CODE] = codes[at + 1]
                trips |= 4
    told[_W_TRIPS] = trips
    if trips and told[_W_BREAKS]:
        stop()


@micropython.viper
def tripped(words: ptr32) -> int:
    """1 where a trip has ended the pulse, which must then not run again."""
    if words[_W_TRIPS] and words[_W_BREAKS]:
        return 1
    return 0


def supervise(voltage_trip_code, current_trip_code, breaks):
    timer.deinit()
    words[_W_TICKS] = 0
    words[_W_TRIPS] = 0
    words[_W_TRIP_CODE] = 0
    words[_W_BREAKS] = 1 if breaks else 0
    words[_W_VOLTAGE_TRIP] = voltage_trip_code
    words[_W_CURRENT_TRIP] = current_trip_code
    timer.init(period=1, mode=machine.Timer.PERIODIC, callback=visit, hard=True)


def ticks():
    return words[_W_TICKS]


def trips():
    return words[_W_TRIPS]


def trip_code():
    return words[_W_TRIP_CODE]


def supervise_end():
    timer.deinit()
    words[_W_BREAKS] = 0
