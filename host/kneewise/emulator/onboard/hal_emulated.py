"""The board file of the emulated tracer; runs in MicroPython and on CPython alike.

It stands where `tracer/hal_rp2.py` stands on a real board, and turns the firmware's calls into
numbered requests to the emulated board (`kneewise.emulator.board`), over a byte pipe or in the
same process. Two objects are passed in:

`bus.call(name, a, b)`  bytes of the reply
`link`                  `wait(ms)`, `read(buffer)`, `write(data)`, `pace(us)`
"""

from tracer import hal

MHZ = 125  # of the RP2040 that is stood in for
UNHEARD_US = 1000000  # of a charge may pass at once; from then on it takes its real time
SAFE_LEVEL = 0
HANG_US = 1000


class EmulatedHal(hal.Hal):
    EMULATED = True

    def __init__(self, bus, link, device_id, seed):
        self._bus = bus
        self._link = link
        self._device_id = device_id
        self._random = seed & 0xFFFFFFFF or 1
        self._quiet_us = 0
        self._began_us = 0
        self._filled = 0
        self._ring_bytes = bytearray(4 * self.RING_PAIRS)
        # The same memory as 16-bit words: what the folding code reads.
        self.ring = memoryview(self._ring_bytes)
        self.ring = self._words(self.ring)

    @staticmethod
    def _words(view):
        """On CPython the folding code indexes words; viper casts the buffer itself."""
        return view.cast("I") if hasattr(view, "cast") else view

    def _number(self, name, a=0, b=0):
        return int.from_bytes(self._bus.call(name, a, b), "little")

    def device_id(self):
        return self._device_id

    def reset_cause(self):
        return self._number("reset_cause")

    def random32(self):
        # xorshift32 (Marsaglia 2003): an emulated tracer must repeat itself for the same seed.
        x = self._random
        x ^= (x << 13) & 0xFFFFFFFF
        x ^= x >> 17
        x ^= (x << 5) & 0xFFFFFFFF
        self._random = x
        return x

    def use_converters(self, kind, pair_us, clock_khz, convert_ns):
        if kind == hal.SPI16:
            from tracer.spi_timing import plan

            plan(MHZ, pair_us, clock_khz, convert_ns)
        if not self._number("use_converters", kind, pair_us):
            raise ValueError("no such converters")
        self.PAIR_US = pair_us
        self.SKEW_NS = 2000 if kind == hal.INTERNAL else 0
        self.CODE_BITS = 12 if kind == hal.INTERNAL else 16

    def zero_input(self, on):
        self._bus.call("zero_input", 1 if on else 0, 0)

    def safe(self):
        self.pulse(0)
        self._bus.call("relay", SAFE_LEVEL, 0)
        self._bus.call("bleed_release", SAFE_LEVEL, 0)

    def relay(self, closed):
        self._bus.call("relay", 1 if closed else 0, 0)

    def bleed(self, engaged):
        self._bus.call("bleed_release", 0 if engaged else 1, 0)

    def use_contact(self, bare):
        """The emulated wave ends by itself however long it is."""

    def pulse(self, us):
        self._bus.call("pulse", us, 0)

    def stop_loop_closed(self):
        return self._number("stop_loop_closed") != 0

    def leads_reversed(self):
        return self._number("leads_reversed") != 0

    def read(self, channel, count):
        return self._number("read", channel, count)

    def capture_start(self):
        self._filled = 0
        self._began_us = self.now_us()
        self._bus.call("capture_start", 0, 0)

    def capture_began_us(self):
        return self._began_us

    def capture_written(self):
        data = self._bus.call("capture_take", 0, 0)
        ring = self._ring_bytes
        size = len(ring)
        place = 4 * self._filled % size
        start = 0
        while start < len(data):
            many = min(len(data) - start, size - place)
            ring[place : place + many] = data[start : start + many]
            start += many
            place = (place + many) % size
        self._filled += len(data) // 4
        return self._number("capture_written")

    def capture_stop(self):
        return self._number("capture_stop") != 0

    def supervise(self, voltage_trip_code, current_trip_code, breaks):
        self._bus.call("supervise_breaks", 1 if breaks else 0, 0)
        self._bus.call("supervise", voltage_trip_code, current_trip_code)

    def supervision_ticks(self):
        return self._number("supervision_ticks")

    def trips(self):
        return self._number("trips")

    def trip_code(self):
        return self._number("trip_code")

    def supervise_end(self):
        self._bus.call("supervise_end", 0, 0)

    def now_us(self):
        return self._number("now_us")

    def ticks_us(self):
        return self.now_us() & 0x3FFFFFFF

    def wait_us(self, us):
        self._bus.call("wait", us, 0)
        self._quiet_us += us
        if self._quiet_us > UNHEARD_US:
            # A host can keep pace only with real time, and must be heard by then.
            self._link.pace(us)

    def bleed_wait(self, ms):
        if not self._link.wait(0):
            self._bus.call("wait", 1000 * ms, 0)
            self._link.pace(0)

    def quiet_begin(self):
        self._quiet_us = 0
        self._bus.call("quiet", 1, 0)

    def quiet_end(self):
        self._bus.call("quiet", 0, 0)

    def hang(self):
        while True:
            self.wait_us(HANG_US)
            self._link.pace(0)

    def watchdog(self, ms):
        self._bus.call("watchdog", ms, 0)

    def link_wait(self, ms):
        self._link.wait(ms)

    def link_read(self, buffer):
        return self._link.read(buffer)

    def link_write(self, data):
        return self._link.write(data)
