"""The emulated board: what stands between the firmware's pins and the analogue plant.

Comes in: calls of the firmware's emulated board file, in this process or as numbered
requests from another (`bus.py`). Goes out: code sums, switch states and virtual time, all
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
import time
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import replace

import numpy as np

from kneewise.emulator.converters import Converters, Scaling
from kneewise.emulator.mishaps import CIRCUIT, STUCK, Mishaps, Value, check, undoes
from kneewise.emulator.plant import Plant
from kneewise.emulator.scenario import Scenario
from kneewise.emulator.source import Source

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


class WatchdogBite(PowerLost):
    """The watchdog has reset the board; it has power, and starts again."""


POWER_ON, WATCHDOG, SOFT_RESET = 1, 3, 4  # reset causes, as on the wire


class Board:
    """One board, powered from the moment it is made, on one scenario.

    `clock` gives seconds. `record` holds (virtual microseconds, what, level) of every change
    of a commanded output (`relay`, `bleed_release`, `zero_input`, `pulse`: 1 while the wave
    runs), of an actual contact (`relay_contact`, `switch_contact`, `bleed_contact`), of the path
    as a whole (`conducting`), and of what a test has let go wrong ("event:" and its name in
    `mishaps.py`: 1, or 0 where it is put right), newest last.
    """

    def __init__(
        self,
        scenario: Scenario,
        *,
        scaling: Scaling | None = None,
        clock: Callable[[], float] = time.monotonic,
        cut_link: Callable[[], None] | None = None,
    ) -> None:
        self.scenario = scenario
        self.scaling = scaling or Scaling()
        self.record: deque[tuple[int, str, Level]] = deque(maxlen=RECORD_ENTRIES)
        self._foreseen = scenario  # once all that is planned has happened
        self._mishaps = Mishaps()
        self._cut_link = cut_link
        self._clock = clock
        self._plant = Plant(scenario.build_source(), scenario.build_circuit(), self._moved)
        self._converters = Converters(scenario, self.scaling)
        self._powered = True
        self.reset_cause = POWER_ON
        """Code of the last reset, as hello has it."""
        self._breaks = False
        self._bite_us: int | None = None
        self._boot_us = 0
        self._quiet = False
        self._quiet_count = 0
        self._levels: dict[str, Level] = dict.fromkeys(
            ("relay", "bleed_release", "zero_input", "pulse")
        )
        self._stop_loop_open = scenario.board.stop_loop_open
        self._plant.stop_loop(not self._stop_loop_open)
        self._anchor()

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
        plant, powered = self._plant, self._powered
        while plant.now_us < end_us:
            stops = [end_us]
            if self._converters.capturing:
                stops.append(plant.now_us + CHUNK_US)
            if self._mishaps.waiting and plant.next_event_us is not None:
                # A closing sets the moment of what is planned, so none may be passed over.
                stops.append(plant.next_event_us)
            if self._mishaps.next_us is not None:
                stops.append(self._mishaps.next_us)
            if self._breaks and self._converters.next_look_us is not None:
                stops.append(self._converters.next_look_us)
            if self._quiet and self._bite_us is not None:
                stops.append(max(self._bite_us, plant.now_us))
            self._converters.run(plant, min(stops), self._stop_loop_open)
            for what, given in self._mishaps.take(plant.now_us):
                self._happen(what, given)
            if self._tripped():
                self._stop_wave()
            if powered and not self._powered:
                raise PowerLost(f"at {plant.now_us} us of virtual time")
            if self._quiet and self._bite_us is not None and self._bite_us <= plant.now_us:
                self._let_go(powered=True)
                self.reset_cause = WATCHDOG
                raise WatchdogBite(f"at {plant.now_us} us of virtual time")

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
        self.reset_cause = POWER_ON
        self._breaks = False
        self._bite_us = None
        self._boot_us = self._plant.now_us
        self._mishaps.power_is_gone()
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
        if self._powered and not self._tripped():
            self._note("pulse", None if us is None else int(us > 0))
            self._plant.pulse(us or 0)

    def _tripped(self) -> bool:
        """Whether the supervision has ended the wave for good."""
        return self._breaks and self._converters.trips != 0

    def _stop_wave(self) -> None:
        self._note("pulse", 0)
        self._plant.pulse(0)

    def _note(self, what: str, level: Level) -> None:
        if self._levels[what] != level:
            self._levels[what] = level
            self.record.append((self._plant.now_us, what, level))

    def _moved(self, time_us: int, what: str, level: int) -> None:
        """Notice of the plant."""
        if what in self._levels:
            self._levels[what] = level
        self.record.append((time_us, what, level))
        if what == "conducting" and level:
            self._mishaps.closed(time_us)

    # -- what goes wrong ------------------------------------------------------------------

    def after_closing(self, delay_us: int, what: str, value: Value = 1) -> None:
        """Let something happen, once, `delay_us` after the source next begins to conduct.

        Names and values are those of `mishaps.py`. ValueError, ScenarioError.
        """
        self._mishaps.after_closing(delay_us, what, self._given(what, value, delay_us))

    def change(self, what: str, value: Value = 1) -> None:
        """Let the same happen now."""
        self.tick_wall()
        self._happen(what, self._given(what, value))

    def _given(self, what: str, value: Value, delay_us: int = 0) -> tuple[Value, Source | None]:
        """With the source that a change of it leads to."""
        check(what, value, delay_us)
        if what == "link_cut" and self._cut_link is None:
            raise ValueError("this board has no link to cut")
        if what != "source":
            return value, None
        self._foreseen = self._foreseen.varied(source=value)
        return value, self._foreseen.build_source()

    def _happen(self, what: str, given: tuple[Value, Source | None]) -> None:
        value, source = given
        self.record.append((self._plant.now_us, f"event:{what}", int(not undoes(what, value))))
        if what in CIRCUIT:
            self._plant.alter(circuit=replace(self._plant.circuit, **{CIRCUIT[what]: bool(value)}))
        elif what in STUCK:
            assert not isinstance(value, Mapping)
            self._converters.stuck[STUCK[what]] = value
        elif what == "source":
            self._plant.alter(source=source)
        elif what == "stop_loop":
            self._stop_loop_open = bool(value)
            self._plant.stop_loop(not value)
        elif what == "power_off":
            self._let_go(powered=not value)
        elif self._cut_link is not None and value:
            self._cut_link()

    # -- inputs ---------------------------------------------------------------------------

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

    def watchdog(self, ms: int) -> None:
        """Bite `ms` from now on, unless fed by another call; 0 stops it.

        It counts declared waits within a quiet alone: a busy machine is no firmware that hangs.
        """
        self.tick_wall()
        self._bite_us = self._plant.now_us + 1000 * ms if ms else None

    def supervise_breaks(self, breaks: int) -> None:
        """1: from now on a trip ends the wave at once, until the supervision ends."""
        self.tick_wall()
        self._breaks = bool(breaks)

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

    def trip_code(self) -> int:
        """The code that was the first to trip."""
        self.tick_wall()
        return self._converters.trip_code

    def supervise_end(self) -> None:
        self.tick_wall()
        self._breaks = False
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
    def loop_current_a(self) -> float:
        """The true current through the contact (A), at the virtual time reached."""
        return self._plant.loop_current_a

    @property
    def bleed_energy_j(self) -> float:
        """What the bleed resistor has truly taken since the plant began (J)."""
        return self._plant.bleed_energy_j

    @property
    def hot_openings(self) -> list[tuple[int, float]]:
        """(virtual microseconds, amperes broken) of each opening under more than 0.1 A."""
        return self._plant.hot_openings

    @property
    def virtual_us(self) -> int:
        """Virtual time reached since the plant began, which no power cycle sets back."""
        return self._plant.now_us
