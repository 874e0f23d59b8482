"""The emulated board: what stands between the firmware's pins and the analogue plant.

Comes in: calls of the firmware's emulated board file, in this process or as numbered
requests from another (`dispatch`). Goes out: code sums, switch states and virtual time, all
whole numbers. The circuit does not belong here (`plant.py`), nor how a code comes about
(`converters.py`), nor any decision of the firmware.

Virtual time is in whole microseconds. It follows the clock that is passed in, except between
`quiet(1)` and `quiet(0)`, where the clock stands still; declared waits and conversions let it
jump on at once, everywhere. What is drawn at random inside a quiet stretch depends on the
scenario's seed and the number of that stretch alone, so that idle polls, whose number depends
on the wall clock, change nothing in a sweep.

Pins without power or without a driver are held by external pulls: relay off, wave off, bleed
contact closed.
"""

from __future__ import annotations

import contextlib
import struct
import time
from collections import deque
from collections.abc import Callable

import numpy as np

from kneewise.emulator.converters import Converters, Scaling
from kneewise.emulator.plant import Plant
from kneewise.emulator.scenario import Scenario

Level = int | None
"""1, 0, or None for a pin that nothing drives."""

COUNT_MASK = 2**30 - 1
CHUNK_US = 16_384  # passed at once while a capture runs, to bound what is held
RECORD_ENTRIES = 10_000
REVERSED_V = -1.0  # the comparator across the source's terminals trips below this


class PowerLost(BaseException):
    """The board has lost power inside a call, and the firmware ends here.

    Not an Exception: firmware that runs in this process must not be able to catch it.
    """


class Board:
    """One board, powered from the moment it is made, on one scenario.

    `clock` gives seconds. `record` holds (virtual microseconds, what, level) of every change
    of a commanded output (`relay`, `bleed_release`, `zero_input`, `pulse`: 1 while the wave
    runs) and of an actual contact (`relay_contact`, `switch_contact`, `bleed_contact`), newest
    last.
    """

    def __init__(
        self,
        scenario: Scenario,
        *,
        scaling: Scaling | None = None,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self.scenario = scenario
        self.scaling = scaling or Scaling()
        self.record: deque[tuple[int, str, Level]] = deque(maxlen=RECORD_ENTRIES)
        self.power_off_after_closing_us: int | None = None
        """Lose power this long after the source next begins to conduct; then None again."""
        self.open_stop_loop_after_closing_us: int | None = None
        """Open the stop loop this long after the source next begins to conduct; then None."""
        self._power_off_us: int | None = None
        self._stop_loop_us: int | None = None
        self._clock = clock
        self._plant = Plant(scenario.build_source(), scenario.build_circuit(), self._moved)
        self._converters = Converters(scenario, self.scaling)
        self._powered = True
        self._boot_us = 0
        self._quiet = False
        self._quiet_count = 0
        self._levels: dict[str, Level] = dict.fromkeys(
            ("relay", "bleed_release", "zero_input", "pulse")
        )
        self._stop_loop_open = False
        self._anchor()
        self.open_stop_loop(scenario.board.stop_loop_open)

    # -- time -----------------------------------------------------------------------------

    def _anchor(self) -> None:
        """From here on the clock counts from the virtual time reached."""
        self._anchor_us = self._plant.now_us
        self._anchor_s = self._clock()

    def tick_wall(self) -> None:
        """Outside quiet: let as much virtual time pass as the clock has. Raises PowerLost."""
        if not self._quiet:
            elapsed_us = round((self._clock() - self._anchor_s) * 1e6)
            self._pass_until(self._anchor_us + elapsed_us)

    def now_us(self) -> int:
        """Since this board was last given power."""
        self.tick_wall()
        return self._plant.now_us - self._boot_us

    def wait(self, us: int) -> None:
        """A declared wait: virtual time jumps. Raises PowerLost."""
        self.tick_wall()
        self._jump(us)

    def _jump(self, us: int) -> None:
        self._anchor_us += us
        self._pass_until(self._plant.now_us + us)

    def quiet(self, begin: int) -> None:
        """1: the clock stands still; 0: it goes on, from where virtual time is by then."""
        self.tick_wall()
        if begin and not self._quiet:
            self._quiet_count += 1
            self._converters.draw_for_quiet(self._quiet_count)
        elif not begin and self._quiet:
            self._converters.draw_for_idle()
            self._anchor()
        self._quiet = bool(begin)

    def _pass_until(self, end_us: int) -> None:
        plant = self._plant
        while plant.now_us < end_us:
            stops = [end_us]
            if self._converters.capturing:
                stops.append(plant.now_us + CHUNK_US)
            planned = (self.power_off_after_closing_us, self.open_stop_loop_after_closing_us)
            if planned != (None, None) and plant.next_event_us is not None:
                # A closing sets the moment of what is planned, so none may be passed over.
                stops.append(plant.next_event_us)
            stops += [us for us in (self._power_off_us, self._stop_loop_us) if us is not None]
            self._converters.run(plant, min(stops), self._stop_loop_open)
            if self._stop_loop_us is not None and self._stop_loop_us <= plant.now_us:
                self._stop_loop_us = None
                self.open_stop_loop(True)
            if self._power_off_us is not None and self._power_off_us <= plant.now_us:
                self._power_off_us = None
                self._let_go(powered=False)
                raise PowerLost(f"at {plant.now_us} us of virtual time")

    # -- power and outputs ----------------------------------------------------------------

    def power(self, on: bool) -> None:
        """Without power nothing drives a pin and no firmware runs; time goes on.

        With power again the pins stay undriven until the firmware drives them, and `now_us`
        starts from 0.
        """
        # A loss that falls due on the way has come to the same; no firmware is calling here.
        with contextlib.suppress(PowerLost):
            self.tick_wall()
        if on != self._powered:
            self._let_go(powered=on)

    def _let_go(self, *, powered: bool) -> None:
        """As out of reset: no pin driven, no converter running, the clock followed."""
        self._powered = powered
        self._boot_us = self._plant.now_us
        self._power_off_us = None
        self._quiet = False
        self._anchor()
        self._converters.reset()
        self._converters.draw_for_idle()
        for what in self._levels:
            self._note(what, None)
        self._plant.relay(False)
        self._plant.bleed_release(False)
        self._plant.pulse(0)

    def settle(self, us: int) -> None:
        """Let `us` pass with no firmware."""
        self.tick_wall()
        self._jump(us)

    def relay(self, level: Level) -> None:
        """Coil of the isolating relay."""
        self.tick_wall()
        if self._powered:
            self._note("relay", level)
            self._plant.relay(level == 1)

    def bleed_release(self, level: Level) -> None:
        """Coil that opens the bleed contact."""
        self.tick_wall()
        if self._powered:
            self._note("bleed_release", level)
            self._plant.bleed_release(level == 1)

    def zero_input(self, level: Level) -> None:
        """Switch that brings the voltage channel's input to its zero."""
        self.tick_wall()
        if self._powered:
            self._note("zero_input", level)
            self._converters.voltage_at_zero = level == 1

    def pulse(self, us: Level) -> None:
        """Run the make-and-break wave for at most `us` from now; 0 stops it, None lets go.

        A new call replaces what was left.
        """
        self.tick_wall()
        if self._powered:
            self._note("pulse", None if us is None else int(us > 0))
            self._plant.pulse(us or 0)

    def _note(self, what: str, level: Level) -> None:
        if self._levels[what] != level:
            self._levels[what] = level
            self.record.append((self._plant.now_us, what, level))

    def _moved(self, time_us: int, what: str, level: int) -> None:
        """Notice of the plant."""
        if what in self._levels:
            self._levels[what] = level
        if what != "conducting":
            self.record.append((time_us, what, level))
        elif level:
            if self.power_off_after_closing_us is not None:
                self._power_off_us = time_us + self.power_off_after_closing_us
                self.power_off_after_closing_us = None
            if self.open_stop_loop_after_closing_us is not None:
                self._stop_loop_us = time_us + self.open_stop_loop_after_closing_us
                self.open_stop_loop_after_closing_us = None

    # -- inputs ---------------------------------------------------------------------------

    def open_stop_loop(self, is_open: bool) -> None:
        """Open or close the lid: with it the drive current of every coil and of the wave."""
        self.tick_wall()
        self._stop_loop_open = is_open
        self._plant.stop_loop(not is_open)

    def stop_loop_closed(self) -> int:
        self.tick_wall()
        return int(not self._stop_loop_open)

    def leads_reversed(self) -> int:
        """The comparator across the terminals; a dark source reads as not reversed."""
        self.tick_wall()
        voltage, _, _ = self._plant.sample(np.array([float(self._plant.now_us)]))
        return int(voltage[0] < REVERSED_V)

    def read(self, channel: int, count: int) -> int:
        """Sum of `count` conversions of one channel, 2 us each; not during a capture.

        V and I of SPI converters come as pairs, of which one code is taken.
        """
        if self._converters.capturing:
            raise RuntimeError("a channel was read while a capture has the converter")
        self.tick_wall()
        plant = self._plant
        conversion_us = self._converters.conversion_us(channel)
        instants = plant.now_us + conversion_us * np.arange(count, dtype=np.float64)
        with plant.holding():
            self._jump(conversion_us * count)
            analogue = plant.sample(instants)[channel]
        return int(self._converters.codes(channel, analogue).sum(dtype=np.int64))

    # -- capture and supervision ----------------------------------------------------------

    def use_converters(self, kind: int, pair_us: int) -> int:
        """Measure V and I with these from now on; 0 where the board has none such."""
        self.tick_wall()
        return int(self._converters.use(kind, pair_us))

    def capture_start(self) -> None:
        """Pairs from now on, at 250 000/s where nothing else was asked for; the first at once."""
        self.tick_wall()
        self._converters.start(self._plant.now_us)

    def capture_written(self) -> int:
        """Pairs made since the start, modulo 2**30."""
        self.tick_wall()
        return self._converters.pairs & COUNT_MASK

    def capture_take(self) -> bytes:
        """Pairs made since the last take, u16 V and u16 I each, little endian.

        No more than the newest 16 383: a firmware that comes later than that has lost them.
        """
        self.tick_wall()
        return self._converters.take()

    def capture_stop(self) -> int:
        """Conversions dropped."""
        self.tick_wall()
        self._converters.stop()
        return 0

    def supervise(self, voltage_trip_code: int, current_trip_code: int) -> None:
        """Look every millisecond from now on; a code at or above its trip code trips."""
        self.tick_wall()
        self._converters.supervise(self._plant.now_us, voltage_trip_code, current_trip_code)

    def supervision_ticks(self) -> int:
        """Looks since `supervise`, modulo 2**30."""
        self.tick_wall()
        return self._converters.ticks & COUNT_MASK

    def trips(self) -> int:
        """1 stop loop, 2 over-voltage, 4 over-current: those seen since `supervise`."""
        self.tick_wall()
        return self._converters.trips

    def supervise_end(self) -> None:
        self.tick_wall()
        self._converters.supervise_end()

    # -- what a test may look at, and the firmware may not --------------------------------

    @property
    def contact_conducting(self) -> bool:
        return self._plant.conducting

    @property
    def bleed_engaged(self) -> bool:
        return self._plant.bleed_engaged

    @property
    def capacitor_v(self) -> float:
        """The true voltage on the capacitor (V), at the virtual time reached."""
        return self._plant.capacitor_v

    @property
    def virtual_us(self) -> int:
        """Virtual time reached since the plant began, which no power cycle sets back."""
        return self._plant.now_us

    # -- from another process -------------------------------------------------------------

    def dispatch(self, op: int, a: int = 0, b: int = 0) -> bytes:
        """Carry out one numbered request: an i64 in little endian, or the bytes of a take.

        Requests without a result answer 0. A negative level stands for an undriven pin.
        Raises PowerLost, and ValueError for a number that `OPS` does not have.
        """
        if not 1 <= op <= len(_CALLS):
            raise ValueError(f"no request has the number {op}; there are 1 to {len(_CALLS)}")
        reply = _CALLS[op - 1][1](self, a, b)
        if isinstance(reply, bytes):
            return reply
        return struct.pack("<q", reply or 0)


def _level(value: int) -> Level:
    return None if value < 0 else value


_Call = Callable[[Board, int, int], int | bytes | None]
# The order is the number: append only.
_CALLS: tuple[tuple[str, _Call], ...] = (
    ("now_us", lambda board, a, b: board.now_us()),
    ("wait", lambda board, a, b: board.wait(a)),
    ("tick_wall", lambda board, a, b: board.tick_wall()),
    ("quiet", lambda board, a, b: board.quiet(a)),
    ("relay", lambda board, a, b: board.relay(_level(a))),
    ("bleed_release", lambda board, a, b: board.bleed_release(_level(a))),
    ("pulse", lambda board, a, b: board.pulse(_level(a))),
    ("stop_loop_closed", lambda board, a, b: board.stop_loop_closed()),
    ("leads_reversed", lambda board, a, b: board.leads_reversed()),
    ("read", lambda board, a, b: board.read(a, b)),
    ("capture_start", lambda board, a, b: board.capture_start()),
    ("capture_written", lambda board, a, b: board.capture_written()),
    ("capture_take", lambda board, a, b: board.capture_take()),
    ("capture_stop", lambda board, a, b: board.capture_stop()),
    ("supervise", lambda board, a, b: board.supervise(a, b)),
    ("supervision_ticks", lambda board, a, b: board.supervision_ticks()),
    ("trips", lambda board, a, b: board.trips()),
    ("supervise_end", lambda board, a, b: board.supervise_end()),
    ("use_converters", lambda board, a, b: board.use_converters(a, b)),
    ("zero_input", lambda board, a, b: board.zero_input(_level(a))),
)
OPS: dict[str, int] = {name: number for number, (name, _) in enumerate(_CALLS, start=1)}
"""Number of each request, for the emulated board file on the other side of a byte pair."""
