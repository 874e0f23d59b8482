"""A board of plain numbers for the firmware's tests: what it was told, and a small world behind it.

`FakeBoard` fulfils `tracer.hal.Hal`. Time passes only in declared waits. A source that is a
straight line charges the capacitor through relay and wave, the bleed empties it. Whatever the
firmware does, `FakeBoard` fails at once where contact and bleed conduct together.
"""

from __future__ import annotations

from array import array
from collections.abc import Callable
from math import exp
from pathlib import Path
from typing import Any

from kneewire.profile_record import pack_profile, unpack_profile
from kneewise.emulator.firmware import device_folder, firmware_module
from kneewise.instrument.profile import BoardProfile

hal = firmware_module("tracer.hal")
Profile = firmware_module("tracer.profile").Profile
Buffers = firmware_module("tracer.memory").Buffers
Capture = firmware_module("tracer.capture").Capture

DEVICE_ID = b"test\x00\x00\x00\x01"
V_PER_CODE, V_ZERO = 0.0165, 24
A_PER_CODE, A_ZERO = 0.0052, 40
SCALES = ((V_PER_CODE, V_ZERO), (A_PER_CODE, A_ZERO), (V_PER_CODE, V_ZERO))
PAIR_US = 4
PERMANENT_OHM = 22e3

REFERENCE = unpack_profile(
    BoardProfile.load(Path(device_folder()) / "profiles/reference.toml").record(DEVICE_ID)
) | {"capacitance_nf": 220_000}  # as this board has it: short charges, short bleeds


def record(**changes: Any) -> bytes:
    """The reference profile's record, with changes."""
    return pack_profile({**REFERENCE, **changes})


def profile(**changes: Any) -> Any:
    """The reference profile as the firmware holds it, with changes."""
    return Profile(record(**changes))


class Hung(BaseException):
    """The firmware was told to hang, and does nothing from here on."""


class FakeBoard(hal.Hal):
    """See above. Set `source_v`, `capacitor_v`, ... at will; `calls` holds what was called."""

    def __init__(self, *, capacitance_f: float = 220e-6) -> None:
        self.ring = array("I", bytes(4 * self.RING_PAIRS))
        self.calls: list[tuple[str, tuple[Any, ...], int]] = []
        self.time_us = 1_000_000
        self.source_v = 40.0
        self.source_a = 9.0
        self.capacitor_v = 0.0
        self.capacitance_f = capacitance_f
        self.bleed_ohm = 100.0
        self.bleed_broken = False
        self.welded = False
        self.current_offset_codes = 0
        self.loop_closed = True
        self.reversed = False
        self.voltage_at_zero = False
        self.converters: set[int] = {hal.INTERNAL, hal.SPI16}
        self.relay_closed = False
        self.bleed_engaged = True
        self.pulse_until_us = 0
        self.pairs: int | None = None
        self.began_us = 0
        self.stopped_pairs = 0
        self.pairs_stop_at: int | None = None
        self.overtaken = 0
        self.conversions_lost = False
        self.supervised_us: int | None = None
        self.supervision_stops_us: int | None = None
        self.trip_codes = (4095, 4095)
        self.seen_trips = 0
        self.breaks = False
        self.bare = False
        self.relay_welded = False
        self.opened_at_a: list[float] = []
        self.watchdog_ms = 0
        self.quiet = False
        self.incoming = bytearray()
        self.sent = bytearray()
        self.write_room: int | None = None
        self.closings = 0
        self._was_conducting = False
        self._events: list[tuple[int, Callable[[], None]]] = []
        self._random = 0x1234567

    # -- the world -------------------------------------------------------------------------

    def at(self, after_us: int, action: Callable[[], None]) -> None:
        """Let something happen so long after now."""
        self._events.append((self.time_us + after_us, action))
        self._events.sort(key=lambda event: event[0])

    def after_closing(self, after_us: int, action: Callable[[], None]) -> None:
        """Let something happen so long after the contact next conducts."""
        self._on_closing = (after_us, action)

    _on_closing: tuple[int, Callable[[], None]] | None = None

    @property
    def conducting(self) -> bool:
        if self.bare:
            # The wave holds the relay itself, and the stop loop is only sensed.
            return self.time_us < self.pulse_until_us
        relay = self.relay_closed or self.relay_welded
        return relay and self.time_us < self.pulse_until_us and self.loop_closed

    def check(self) -> None:
        """Nobody may ever put the bleed across the source by closing the contact."""
        assert not (self.conducting and self.bleed_engaged), "contact and bleed on together"
        if self._was_conducting and not self.conducting:
            self.opened_at_a.append(self.source_a * (1.0 - self.capacitor_v / self.source_v))
        if self.conducting and not self._was_conducting:
            self.closings += 1
            if self._on_closing is not None:
                self.at(*self._on_closing)
                self._on_closing = None
        self._was_conducting = self.conducting

    def pass_us(self, us: int) -> None:
        end = self.time_us + us
        while self.time_us < end:
            stop = end
            if self.time_us < self.pulse_until_us:
                stop = min(stop, self.pulse_until_us)
            if self._events:
                stop = min(stop, max(self._events[0][0], self.time_us))
            self._let_pass(stop - self.time_us)
            while self._events and self._events[0][0] <= self.time_us:
                self._events.pop(0)[1]()
            self.check()

    def _let_pass(self, us: int) -> None:
        start = self.capacitor_v
        toward = start
        tau_us = 1.0
        if self.welded or self.conducting:
            toward = self.source_v
            tau_us = 1e6 * self.capacitance_f * self.source_v / max(self.source_a, 1e-9) or 1.0
        else:
            bleeding = self.bleed_engaged and not self.bleed_broken
            siemens = 1 / PERMANENT_OHM + (1 / self.bleed_ohm if bleeding else 0.0)
            toward = 0.0
            tau_us = 1e6 * self.capacitance_f / siemens
        if self.pairs is not None:
            self._convert(us, start, toward, tau_us)
        self.time_us += us
        self.capacitor_v = toward + (start - toward) * exp(-us / tau_us)

    def _convert(self, us: int, start: float, toward: float, tau_us: float) -> None:
        assert self.pairs is not None
        for k in range(us // self.PAIR_US):
            if self.pairs_stop_at is not None and self.pairs >= self.pairs_stop_at:
                return
            volt, ampere = self.source_v, 0.0
            if self.conducting:
                volt = toward + (start - toward) * exp(-k * self.PAIR_US / tau_us)
                ampere = self.source_a * (1.0 - volt / self.source_v)
            low = self._code(hal.VOLTAGE, 0.0 if self.voltage_at_zero else volt)
            high = self._code(hal.CURRENT, ampere)
            self.ring[self.pairs % self.RING_PAIRS] = low | high << 16
            self.pairs += 1

    def _code(self, channel: int, value: float) -> int:
        per_code, zero = SCALES[channel]
        fine = 16 if self.CODE_BITS == 16 and channel != hal.CAPACITOR else 1
        offset = self.current_offset_codes if channel == hal.CURRENT else 0
        return min(max(round(fine * value / per_code) + fine * zero + offset, 0), 4096 * fine - 1)

    def _note(self, name: str, *values: Any) -> None:
        self.calls.append((name, values, self.time_us))

    def names(self) -> list[str]:
        """The calls in order, each with its values where it commands something."""
        return [name + "".join(f" {value}" for value in values) for name, values, _ in self.calls]

    def when(self, call: str) -> list[int]:
        """Times of a call, written as `names` has it."""
        times = [time for _, _, time in self.calls]
        return [time for name, time in zip(self.names(), times, strict=True) if name == call]

    # -- Hal -------------------------------------------------------------------------------

    def device_id(self) -> bytes:
        return DEVICE_ID

    def reset_cause(self) -> int:
        return 1

    def random32(self) -> int:
        self._random = (self._random * 1103515245 + 12345) & 0xFFFFFFFF
        return self._random

    def use_converters(self, kind: int, pair_us: int, clock_khz: int, convert_ns: int) -> None:
        self._note("use_converters", kind, pair_us, clock_khz, convert_ns)
        if kind not in self.converters:
            raise ValueError("no such converters")
        self.PAIR_US = pair_us
        self.SKEW_NS = 0 if kind == hal.SPI16 else 2000
        self.CODE_BITS = 16 if kind == hal.SPI16 else 12

    def zero_input(self, on: bool) -> None:
        self._note("zero_input", on)
        self.voltage_at_zero = on

    def safe(self) -> None:
        self._note("safe")
        self.pulse_until_us = 0
        self.relay_closed = False
        self.bleed_engaged = True
        self.check()

    def relay(self, closed: bool) -> None:
        self._note("relay", closed)
        assert not (closed and self.bleed_engaged), "the relay closes onto an engaged bleed"
        self.relay_closed = closed
        self.check()

    def bleed(self, engaged: bool) -> None:
        self._note("bleed", engaged)
        assert not (engaged and self.relay_closed), "the bleed engages onto a closed relay"
        self.bleed_engaged = engaged
        self.check()

    def pulse(self, us: int) -> None:
        self._note("pulse", us)
        self.pulse_until_us = self.time_us + us
        self.check()

    def stop_loop_closed(self) -> bool:
        return self.loop_closed

    def leads_reversed(self) -> bool:
        return self.reversed

    def read(self, channel: int, count: int) -> int:
        self._note("read", channel)
        assert self.pairs is None, "a channel was read during a capture"
        at_source = 0.0 if self.voltage_at_zero else self.source_v
        # What a welded contact brings to the bleed goes through the shunt.
        fed = self.welded and self.bleed_engaged and not self.bleed_broken
        loop_a = self.capacitor_v / self.bleed_ohm if fed else 0.0
        return count * self._code(channel, (at_source, loop_a, self.capacitor_v)[channel])

    def capture_start(self) -> None:
        self._note("capture_start")
        self.pairs = 0
        self.began_us = self.time_us

    def capture_began_us(self) -> int:
        assert not self.quiet, "a time was taken, and so allocated, in the quiet"
        return self.began_us

    def capture_written(self) -> int:
        self._note("capture_written")
        return (self.stopped_pairs if self.pairs is None else self.pairs) + self.overtaken

    def capture_stop(self) -> bool:
        self._note("capture_stop")
        self.stopped_pairs = self.pairs or 0
        self.pairs = None
        return self.conversions_lost

    def supervise(self, voltage_trip_code: int, current_trip_code: int, breaks: bool) -> None:
        self._note("supervise", voltage_trip_code, current_trip_code)
        self.breaks = breaks
        self.supervised_us = self.time_us
        self.trip_codes = (voltage_trip_code, current_trip_code)
        self.seen_trips = 0

    def supervision_ticks(self) -> int:
        self._note("supervision_ticks")
        assert self.supervised_us is not None
        until = self.time_us
        if self.supervision_stops_us is not None:
            until = min(until, self.supervision_stops_us)
        return max(until - self.supervised_us, 0) // 1000

    def trips(self) -> int:
        self._note("trips")
        if not self.loop_closed:
            self.seen_trips |= hal.TRIP_STOP_LOOP
        if self.pairs:
            newest = self.ring[(self.pairs - 1) % self.RING_PAIRS]
            if newest & 0xFFFF >= self.trip_codes[0]:
                self.seen_trips |= hal.TRIP_OVER_VOLTAGE
            if newest >> 16 >= self.trip_codes[1]:
                self.seen_trips |= hal.TRIP_OVER_CURRENT
        return self.seen_trips

    def trip_code(self) -> int:
        newest = self.ring[(self.stopped_pairs or self.pairs or 1) % self.RING_PAIRS - 1]
        return newest & 0xFFFF if self.seen_trips & hal.TRIP_OVER_VOLTAGE else newest >> 16

    def hang(self) -> None:
        raise Hung

    def use_contact(self, bare: bool) -> None:
        self._note("use_contact", bare)
        self.bare = bare

    def supervise_end(self) -> None:
        self._note("supervise_end")
        self.supervised_us = None

    def now_us(self) -> int:
        self._note("now_us")
        assert not self.quiet, "a time was taken, and so allocated, in the quiet"
        return self.time_us

    def ticks_us(self) -> int:
        return self.time_us & 0x3FFFFFFF

    def wait_us(self, us: int) -> None:
        self._note("wait", us)
        self.pass_us(us)

    def bleed_wait(self, ms: int) -> None:
        self.pass_us(1000 * ms)

    def quiet_begin(self) -> None:
        self._note("quiet_begin")
        self.quiet = True

    def quiet_end(self) -> None:
        self._note("quiet_end")
        self.quiet = False

    def watchdog(self, ms: int) -> None:
        self._note("watchdog", ms)
        self.watchdog_ms = ms

    def link_wait(self, ms: int) -> None:
        self.pass_us(1000 * ms)

    def link_read(self, buffer: bytearray) -> int:
        self._note("link_read")
        count = min(len(buffer), len(self.incoming))
        buffer[:count] = self.incoming[:count]
        del self.incoming[:count]
        return count

    def link_write(self, data: bytes) -> int:
        assert not self.quiet, "something was sent in the quiet"
        count = len(data) if self.write_room is None else min(len(data), self.write_room)
        if self.write_room is not None:
            self.write_room -= count
        self.sent += data[:count]
        return count
