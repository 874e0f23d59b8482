"""The emulated board's analogue converters: codes, captures and the 1 kHz supervision.

Comes in: the plant's volts and amperes, and how far virtual time goes. Goes out: codes as the
RP2040's own converter would give them, or a pair of SPI converters of 16 bits. Pins, power and
the wall clock do not belong here; `board.py` has them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from kneewise.emulator.plant import Plant
from kneewise.emulator.scenario import Scenario
from kneewise.emulator.source import Floats

Codes = npt.NDArray[np.uint16]

VOLTAGE, CURRENT, CAPACITOR = 0, 1, 2
TRIP_STOP_LOOP, TRIP_OVER_VOLTAGE, TRIP_OVER_CURRENT = 1, 2, 4

INTERNAL, SPI16 = 1, 2
KINDS = {"internal": INTERNAL, "spi16": SPI16}

CONVERSION_US = 2  # of the RP2040's own converter
PAIR_US = 2 * CONVERSION_US
TICK_US = 1000
UNTAKEN_PAIRS = 16_383  # four times the firmware's ring; the oldest go first


@dataclass(frozen=True, slots=True, kw_only=True)
class Scaling:
    """Analogue value of one code and the code at zero, for each channel."""

    voltage_v_per_code: float = 0.0165
    voltage_zero_code: float = 24.0
    current_a_per_code: float = 0.0052
    current_zero_code: float = 40.0
    capacitor_v_per_code: float = 0.0165
    capacitor_zero_code: float = 24.0


@dataclass(frozen=True, slots=True)
class _Channel:
    zero_code: float
    codes_per_unit: float
    """Gain error included."""
    code_max: int = 4095
    wide_code_lsb: float = 1.0

    def codes(self, analogue: Floats, noise: Floats, stuck_code: int | None) -> Codes:
        if stuck_code is not None:
            return np.full(len(analogue), stuck_code * (self.code_max + 1) // 4096, np.uint16)
        exact = self.zero_code + analogue * self.codes_per_unit + noise + 0.5
        inside = np.clip(exact, 0.0, np.nextafter(self.code_max + 1.0, 0.0))
        if self.wide_code_lsb == 1.0:
            return np.floor(inside).astype(np.uint16)
        return _widened(inside, self.wide_code_lsb).astype(np.uint16)


def _widened(exact: Floats, wide: float) -> Floats:
    """Codes of a converter with the RP2040's wide codes: 511, 1535, 2559, 3583 are `wide` LSB
    wide, all others equally narrower, and the range as a whole stays (erratum RP2040-E11).

    `exact`: in LSB from the range's lower end, 0 <= exact < 4096.
    """
    narrow = (1024.0 - wide) / 1023.0
    part = exact % 1024.0
    past = np.floor((part - 511.0 * narrow - wide) / narrow)
    above = 512.0 + np.minimum(past, 511.0)
    inside = np.where(past >= 0.0, above, np.minimum(np.floor(part / narrow), 511.0))
    return np.asarray(exact - part + inside)


def _channels(scaling: Scaling, scenario: Scenario) -> tuple[_Channel, _Channel, _Channel]:
    s, b = scaling, scenario.board
    kind = {"wide_code_lsb": b.wide_code_lsb} if b.converter == "internal" else {"code_max": 65535}
    return (
        _Channel(
            s.voltage_zero_code + b.voltage_offset_codes,
            (1.0 + b.voltage_gain_error) / s.voltage_v_per_code,
            **kind,
        ),
        _Channel(
            s.current_zero_code + b.current_offset_codes,
            (1.0 + b.current_gain_error) / s.current_a_per_code,
            **kind,
        ),
        _Channel(
            s.capacitor_zero_code, 1.0 / s.capacitor_v_per_code, wide_code_lsb=b.wide_code_lsb
        ),
    )


@dataclass(slots=True)
class _Supervision:
    start_us: int
    voltage_trip_code: int
    current_trip_code: int
    ticks: int = 0
    trips: int = 0
    trip_code: int = 0
    running: bool = True

    def look(self, pairs: Codes, stop_loop_open: bool) -> None:
        """One look at the newest two pairs, shape (2, 2): one alone may be noise."""
        self.ticks += 1
        if stop_loop_open:
            self.trips |= TRIP_STOP_LOOP
        codes = (self.voltage_trip_code, self.current_trip_code)
        for column, (trip_code, bit) in enumerate(
            zip(codes, (TRIP_OVER_VOLTAGE, TRIP_OVER_CURRENT), strict=True)
        ):
            if self.trips & ~TRIP_STOP_LOOP == 0 and (pairs[:, column] >= trip_code).all():
                self.trip_code = int(pairs[1, column])
                self.trips |= bit


class Converters:
    """Three channels, one capture at a time, one supervision at a time."""

    def __init__(self, scenario: Scenario, scaling: Scaling) -> None:
        self._channels = _channels(scaling, scenario)
        self._kind = KINDS[scenario.board.converter]
        self._noise_codes = scenario.board.adc_noise_codes
        b = scenario.board
        self.stuck = [b.voltage_stuck_code, b.current_stuck_code, b.capacitor_stuck_code]
        """For each channel the 12-bit code that it always reads, or None."""
        self._seed = scenario.seed
        self._idle_random = np.random.default_rng([self._seed, 0])
        self._random = self._idle_random
        self.reset()

    def reset(self) -> None:
        """As after power-on: nothing runs."""
        self._start_us: int | None = None
        self._pairs = 0
        self._untaken = bytearray()
        self._newest = np.zeros((2, 2), dtype="<u2")
        self._watch = _Supervision(0, 0, 0, running=False)
        self._pair_us = PAIR_US
        self.voltage_at_zero = False
        """The voltage channel's input is at its zero, not at the source."""

    def use(self, kind: int, pair_us: int) -> bool:
        """Take V and I from these from now on; False where the board has no such converters."""
        if kind != self._kind or (kind == INTERNAL and pair_us != PAIR_US):
            return False
        self._pair_us = pair_us
        return True

    # -- noise ----------------------------------------------------------------------------

    def draw_for_quiet(self, number: int) -> None:
        """Noise from the stream of the quiet stretch of this number (from 1)."""
        self._random = np.random.default_rng([self._seed, number])

    def draw_for_idle(self) -> None:
        """Noise from the one stream of all that is outside quiet."""
        self._random = self._idle_random

    def _noise(self, count: int) -> Floats:
        """One draw for each conversion, in their order: how they are cut makes no difference."""
        return self._random.standard_normal(count) * self._noise_codes

    def conversion_us(self, channel: int) -> int:
        """From one conversion to the next where one channel alone is read."""
        internal = channel == CAPACITOR or self._kind == INTERNAL
        return CONVERSION_US if internal else self._pair_us

    def codes(self, channel: int, analogue: Floats) -> Codes:
        """Convert one channel at instants already sampled."""
        if channel == VOLTAGE and self.voltage_at_zero:
            analogue = np.zeros_like(analogue)
        return self._channels[channel].codes(
            analogue, self._noise(len(analogue)), self.stuck[channel]
        )

    # -- capture --------------------------------------------------------------------------

    @property
    def capturing(self) -> bool:
        return self._start_us is not None

    @property
    def pairs(self) -> int:
        """Pairs made since the capture's start."""
        return self._pairs

    def start(self, now_us: int) -> None:
        """Pairs from now on, the first voltage conversion at once.

        A pair counts as made when the next begins.
        """
        self._start_us = now_us
        self._pairs = 0
        self._untaken.clear()
        self._newest = np.zeros((2, 2), dtype="<u2")

    def take(self) -> bytes:
        """The newest pairs not yet taken, at most UNTAKEN_PAIRS of them."""
        taken = bytes(self._untaken)
        self._untaken.clear()
        return taken

    def stop(self) -> None:
        """The pair in progress is given up."""
        self._start_us = None

    def run(self, plant: Plant, upto_us: int, stop_loop_open: bool) -> None:
        """Let time pass in the plant, with the pairs and the looks that fall due on the way."""
        first = self._pairs
        made = self._make_pairs(plant, upto_us)
        plant.advance_to(upto_us)
        self._look(upto_us, made, first, stop_loop_open)

    def _make_pairs(self, plant: Plant, upto_us: int) -> Codes:
        """Those complete by `upto_us`: shape (n, 2), voltage first."""
        count = 0
        if self._start_us is not None:
            count = (upto_us - self._start_us) // self._pair_us - self._pairs
        made = np.empty((count, 2), dtype="<u2")
        if self._start_us is None or not count:
            return made
        start_us = self._start_us + self._pair_us * self._pairs
        skew_us = CONVERSION_US if self._kind == INTERNAL else 0
        voltage, current = plant.sample_pairs(start_us, count, self._pair_us, skew_us)
        if self.voltage_at_zero:
            voltage = np.zeros_like(voltage)
        noise = self._noise(2 * count)
        made[:, 0] = self._channels[VOLTAGE].codes(voltage, noise[0::2], self.stuck[VOLTAGE])
        made[:, 1] = self._channels[CURRENT].codes(current, noise[1::2], self.stuck[CURRENT])
        self._untaken += made.tobytes()
        del self._untaken[: max(0, len(self._untaken) - 4 * UNTAKEN_PAIRS)]
        self._pairs += count
        return made

    # -- supervision ----------------------------------------------------------------------

    def supervise(self, now_us: int, voltage_trip_code: int, current_trip_code: int) -> None:
        """Look every millisecond from now on; a code at or above its trip code trips."""
        self._watch = _Supervision(now_us, voltage_trip_code, current_trip_code)

    def supervise_end(self) -> None:
        self._watch.running = False

    @property
    def ticks(self) -> int:
        """Looks since `supervise`."""
        return self._watch.ticks

    @property
    def trips(self) -> int:
        """TRIP_ bits seen since `supervise`."""
        return self._watch.trips

    @property
    def trip_code(self) -> int:
        """The code that was the first to trip."""
        return self._watch.trip_code

    @property
    def next_look_us(self) -> int | None:
        """When the supervision looks next."""
        watch = self._watch
        return watch.start_us + TICK_US * (watch.ticks + 1) if watch.running else None

    def _look(self, upto_us: int, made: Codes, first: int, stop_loop_open: bool) -> None:
        """Take the looks due by `upto_us`; `made` holds the pairs from number `first` on."""
        watch = self._watch
        known = np.concatenate((self._newest, made))
        while watch.running and (due_us := watch.start_us + TICK_US * (watch.ticks + 1)) <= upto_us:
            newest = len(self._newest)
            if self._start_us is not None:
                newest += min((due_us - self._start_us) // self._pair_us - first, len(made))
            watch.look(known[max(newest, 2) - 2 :][:2], stop_loop_open)
        self._newest = known[-2:]
