"""Raw pairs: asking for a stretch of them, and what they are in volts and amperes.

Knots are means; where the converter's own pace matters (a knee, a contact, noise), the device
keeps the pairs of one stretch as well. Comes in: which stretch, in seconds; codes as measured.
Goes out: numbers for arming, and points in SI units. Fetching is `sweep.py`'s.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np

from kneewire import catalogue
from kneewise.errors import UsageError
from kneewise.instrument.linearity import edges
from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import Codes, Floats, RawPairs

LATEST_S = 120.0
INTERNAL_PAIR_US = 4
END_PAIRS = 16
"""Pairs at an end of the stretch, at least, that the voltage is carried on from."""


@dataclass(frozen=True, slots=True)
class Window:
    """What the device is armed with. `shrinks`: fewer pairs will do where its memory is short."""

    from_us: int
    pairs: int
    shrinks: bool = False
    middle_us: float | None = None
    pair_us: int = INTERNAL_PAIR_US

    @classmethod
    def round_about(cls, middle_us: float, pairs: int, shrinks: bool, pair_us: int) -> Window:
        """With `middle_us` in its middle, or from the beginning of conduction on."""
        from_us = max(round(middle_us - 0.5 * pairs * pair_us), 0)
        return cls(from_us, pairs, shrinks, middle_us, pair_us)

    def smaller(self) -> Window:
        """Half as many pairs, from the same start or about the same middle."""
        if self.middle_us is None:
            return replace(self, pairs=self.pairs // 2)
        return self.round_about(self.middle_us, self.pairs // 2, self.shrinks, self.pair_us)


NO_WINDOW = Window(0, 0)


@dataclass(frozen=True, slots=True, kw_only=True)
class FullRate:
    """A stretch of a sweep whose raw pairs are wanted.

    `start_s`: s after conduction began, as `Trace.time` counts; None for a stretch with the
    maximum power in its middle, which needs a scout sweep. `duration_s`: s; None for as long as
    the device's memory allows.
    """

    start_s: float | None = None
    duration_s: float | None = None

    def check(self, profile: dict[str, Any], limit_s: float) -> None:
        """UsageError for a stretch that a device with this profile cannot give."""
        self.pairs(pair_us_of(profile))
        last_s = min(limit_s, LATEST_S)
        if self.start_s is not None and not 0.0 <= self.start_s < last_s:
            raise UsageError(
                "asking for raw pairs",
                found=f"a stretch from {1e3 * self.start_s:g} ms on",
                expected="a start from 0 ms on, before the longest closed time, "
                f"{1e3 * last_s:g} ms",
                next_step="start earlier, or allow a longer closed time",
            )

    def window(self, profile: dict[str, Any], maximum_s: float = 0.0) -> Window:
        """For a device with this profile. `maximum_s`: when the scout passed its maximum power."""
        pair_us = pair_us_of(profile)
        pairs, shrinks = self.pairs(pair_us), self.duration_s is None
        late_us = 1e-3 * profile.get("current_delay_ns", 0)
        if self.start_s is None:
            return Window.round_about(1e6 * maximum_s + late_us, pairs, shrinks, pair_us)
        return Window(round(1e6 * self.start_s + late_us), pairs, shrinks)

    def pairs(self, pair_us: int) -> int:
        """How many there are at `pair_us` from one to the next. UsageError for too many."""
        most = catalogue.MAX_RAW_PAIRS
        if self.duration_s is None:
            return most
        pairs = round(min(1e6 * self.duration_s / pair_us, 1e9)) if self.duration_s > 0.0 else 0
        if not 0 < pairs <= most:
            raise UsageError(
                "asking for raw pairs",
                found=f"a stretch of {1e3 * self.duration_s:g} ms, {pairs} pairs",
                expected=f"{1e-3 * pair_us:g} to {1e-3 * most * pair_us:g} ms, which is "
                f"{most} pairs at one every {pair_us} us",
                next_step="ask for a shorter stretch, or for its parts in one sweep each"
                if pairs
                else "ask for a longer stretch",
            )
        return pairs


def pair_us_of(profile: dict[str, Any]) -> int:
    """From one pair to the next; without a profile that of the board's own converter."""
    return int(profile.get("pair_us") or INTERNAL_PAIR_US)


@dataclass(frozen=True, kw_only=True)
class FullRatePairs:
    """Pairs of one stretch of a sweep: `raw` as measured, and each as a point of the curve.

    `voltage` (V), `current` (A) and `time` (s, as `Trace.time`) have shape (n,), n = len(raw).
    Taken out of them are zeros and scale factors, the skew between a pair's two conversions,
    the channels' delays, the divider's own current and the drop of two-wire leads.

    What is not done: nothing is averaged or unbent, a point has the noise of its conversions.
    A code stands for the middle of the inputs that give it, also a wide one, which says no more
    than that the input lay within 4.5 codes of it. For the skew the voltage is drawn straight
    from one conversion to the next, so that its noise is that of a mean of neighbours; beyond
    the last one (or the first, where the voltage's filter is the slower) it is carried on along
    the line through the `END_PAIRS` nearest. What a filter does to a fast change stays in.
    """

    raw: RawPairs
    asked: int | None
    """Pairs asked for; more than there are where the sweep ended before. None: not known."""
    pair_ns: int
    skew_ns: int
    """From a pair's voltage conversion to its current conversion."""
    scales: Scales
    """The profile's, with the zeros that were measured."""

    def __len__(self) -> int:
        return len(self.raw)

    @property
    def stretch_s(self) -> tuple[float, float]:
        """From where to where, s after conduction began."""
        first = self.raw.first
        return 1e-9 * self.pair_ns * first, 1e-9 * self.pair_ns * (first + len(self.raw))

    @property
    def _instant_s(self) -> float:
        """Of a pair's current at the source, after its voltage conversion."""
        return 1e-9 * self.skew_ns - self.scales.current_delay_s

    @cached_property
    def time(self) -> Floats:
        """The instants of the currents at the source, s."""
        numbers = self.raw.first + np.arange(len(self.raw))
        return np.asarray(1e-9 * self.pair_ns * numbers + self._instant_s, dtype=np.float64)

    @cached_property
    def _points(self) -> tuple[Floats, Floats]:
        scales = self.scales
        later = (self._instant_s + scales.voltage_delay_s) / (1e-9 * self.pair_ns)
        codes = _later(_inputs(self.raw.voltage, scales), later)
        voltage = (codes - scales.voltage_zero_code) * scales.voltage_v_per_code
        codes = _inputs(self.raw.current, scales)
        current = (codes - scales.current_zero_code) * scales.current_a_per_code
        current = current + voltage / scales.divider_ohm
        return voltage + current * scales.lead_ohm, current

    @property
    def voltage(self) -> Floats:
        """V of the source at `time`."""
        return self._points[0]

    @property
    def current(self) -> Floats:
        """A of the source at `time`."""
        return self._points[1]


def _inputs(codes: Codes, scales: Scales) -> Floats:
    """The middle of the inputs that give each code, in ideal codes."""
    if scales.wide_code_lsb <= 1.0:
        return codes.astype(np.float64)
    below = edges(scales.wide_code_lsb, scales.code_max)
    borders = np.concatenate(([-0.5], below, [scales.code_max + 0.5]))
    middles: Floats = 0.5 * (borders[1:] + borders[:-1])
    return middles[np.minimum(codes, scales.code_max)]


def _later(values: Floats, pairs: float) -> Floats:
    """Values `pairs` places on."""
    if len(values) < 2:
        return values
    at = np.arange(len(values), dtype=np.float64)
    wanted = at + pairs
    moved = np.interp(wanted, at, values)
    for outside, end in (
        (wanted > at[-1], slice(-END_PAIRS, None)),
        (wanted < 0.0, slice(None, END_PAIRS)),
    ):
        if outside.any():
            line = np.polynomial.Polynomial.fit(at[end], values[end], 1)
            moved[outside] = line(wanted[outside])
    return moved
