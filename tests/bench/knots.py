"""The numbers of the knots: how true the curve through them is, and what they cost in power.

Distances are in the plane (V / Voc, I / Isc), from the curve to the straight lines between the
knots, from the first knot to the last. `charges.py` has the sources and says what is simulated.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cache

import numpy as np

from kneewise.curve.figures import Figures, extract

from . import optimum, placing
from .charges import (
    PAIR_NS,
    SOURCES,
    Charge,
    Codes,
    Floats,
    Ints,
    codes_of,
    convert_raw,
    figures_of,
    source,
)
from .row import Row

KNOTS = (32, 64, 128)
PAIRS = 4070
"""Of a charge without noise, a bin each: as many as the firmware's memory holds, nearly."""
FEW_PAIRS = 2100
"""As few bins as a charge leaves that has just filled them all."""
STEPPED = ("two steps", "three steps")
OVER_OPTIMUM, OVER_OPTIMUM_STEPPED = 1.5, 1.8
UNDER_EQUAL_TIMES = 10.0
NOISE = 1.2  # codes
NOISY_KNOTS = 64
OVER_PAIRS = 1.25
BIAS = 0.02  # %
SEEDS, QUICK_SEEDS = 300, 30
_FINER = 2.0**32  # codes over the plane, so that the host's quantizing does not count


def rows(quick: bool) -> Iterator[Row]:
    for name in SOURCES:
        for knots in KNOTS:
            yield from truth_rows(name, knots)
    yield from few_bins_rows()
    yield from end_rows()
    for name in SOURCES:
        yield from noise_rows(name, QUICK_SEEDS if quick else SEEDS)


# -- without noise ----------------------------------------------------------------------------


@dataclass(frozen=True)
class Curve:
    """A charge without noise, in the plane."""

    made: Charge
    x: Floats
    y: Floats
    """Of every pair, shape (pairs,)."""
    fine_x: Floats
    fine_y: Floats
    """The curve from the first pair to the last, shape (CANDIDATES,)."""

    @classmethod
    @cache
    def of(cls, name: str, pairs: int = PAIRS) -> Curve:
        made = source(name)
        at: Floats = np.arange(0.3, pairs, dtype=np.float64) * (made.end_s / pairs)
        (first, last), scale = at[[0, -1]], (made.voc, made.isc)
        between = (made.time > first) & (made.time < last)
        times: Floats = np.concatenate(([first], made.time[between], [last]))
        x, y, fine_x, fine_y = (
            each / of
            for seconds in (at, times)
            for each, of in zip(made.at(seconds), scale, strict=True)
        )
        return cls(made, x, y, *optimum.candidates(fine_x, fine_y))

    def error(self, x: Floats, y: Floats) -> float:
        """Largest distance of the curve, from the first of the points to the last."""
        # Across the curve at its ends: both ends are nearly level or nearly upright.
        along = self.fine_x - self.fine_y
        seen = (along >= x[0] - y[0]) & (along <= x[-1] - y[-1])
        return float(optimum.distances(x, y, self.fine_x[seen], self.fine_y[seen]).max())

    def middles(self, cuts: Ints) -> tuple[Floats, Floats]:
        """The curve at the knots' middle instants."""
        middle = 0.5 * (cuts[:-1] + cuts[1:] - 1)
        number = np.arange(len(self.x))
        return np.interp(middle, number, self.x), np.interp(middle, number, self.y)

    def points(self, cuts: Ints) -> tuple[Floats, Floats]:
        """What the host makes of the knots' means."""
        made = replace(self.made, volts=self.made.voc / _FINER, amperes=self.made.isc / _FINER)
        codes = Codes(np.rint(self.x * _FINER) + 24.0, np.rint(self.y * _FINER) + 40.0)
        raw = codes.knots(np.diff(cuts))
        still = np.zeros(len(raw), dtype=np.uint64)
        raw = replace(raw, voltage_scatter=still, current_scatter=still)
        found = convert_raw(made, raw, 1)
        return found.voltage / self.made.voc, found.current / self.made.isc

    def at_equal_times(self, count: int) -> tuple[Floats, Floats]:
        number = np.rint(np.linspace(0, len(self.x) - 1, count)).astype(np.int64)
        return self.x[number], self.y[number]


def over_optimum(name: str) -> float:
    return OVER_OPTIMUM_STEPPED if name in STEPPED else OVER_OPTIMUM


@cache
def optimum_of(name: str, knots: int) -> float:
    curve = Curve.of(name)
    return optimum.optimum(curve.fine_x, curve.fine_y, knots)


def truth_rows(name: str, knots: int) -> Iterator[Row]:
    curve = Curve.of(name)
    cuts = placing.exact_places(curve.x, curve.y, knots)
    found = curve.error(*curve.points(cuts))
    best = optimum_of(name, knots)
    equal = curve.error(*curve.at_equal_times(knots))
    start = f"{name}, {knots}"
    goal = over_optimum(name)
    yield Row(f"{start}: over the optimum", found / best, "1", goal, at_least=False)
    yield Row(f"{start}: equal times over it", equal / found, "1", UNDER_EQUAL_TIMES)
    yield Row(f"{start}: middles over optimum", curve.error(*curve.middles(cuts)) / best, "1", None)


def few_bins_rows() -> Iterator[Row]:
    """The largest of all sources, where there are few bins to place knots by."""
    for knots in KNOTS:
        worst = {True: 0.0, False: 0.0}
        for name in SOURCES:
            curve = Curve.of(name, FEW_PAIRS)
            found = curve.error(*curve.points(placing.exact_places(curve.x, curve.y, knots)))
            worst[name in STEPPED] = max(worst[name in STEPPED], found / optimum_of(name, knots))
        yield Row(f"{knots} of {FEW_PAIRS} bins: over optimum", worst[False], "1", None)
        yield Row(f"{knots} of {FEW_PAIRS} bins, stepped: over it", worst[True], "1", None)


def end_rows() -> Iterator[Row]:
    """How far the first and the last knot stand from the first and the last pair."""
    for knots in KNOTS:
        worst = [0.0, 0.0]
        for name in SOURCES:
            curve = Curve.of(name)
            x, y = curve.points(placing.exact_places(curve.x, curve.y, knots))
            for end in (0, -1):
                off = float(np.hypot(x[end] - curve.x[end], y[end] - curve.y[end]))
                worst[end] = max(worst[end], off)
        yield Row(f"{knots} knots: first one from first pair", worst[0], "1", None)
        yield Row(f"{knots} knots: last one from last pair", worst[-1], "1", None)


# -- with noise -------------------------------------------------------------------------------


def of_pairs(made: Charge, codes: Codes, noise: float) -> Figures:
    """The same figures with every pair as a knot of its own."""
    one = np.ones(len(codes.voltage))
    return extract(
        (codes.voltage - 24.0) * made.volts,
        (codes.current - 40.0) * made.amperes,
        weight=one,
        voltage_sigma=noise * made.volts * one,
        current_sigma=noise * made.amperes * one,
        voc_static=made.voc,
    )


@dataclass(frozen=True)
class Agreement:
    """Pmp of many noisy charges, by knots and by every pair."""

    true_pmp: float
    by_knots: Floats
    by_pairs: Floats

    @property
    def ratio(self) -> float:
        return float(np.std(self.by_knots) / np.std(self.by_pairs))

    @property
    def bias(self) -> float:
        """Of the knots, relative."""
        return float(np.mean(self.by_knots) / self.true_pmp - 1.0)

    @property
    def bias_sigma(self) -> float:
        return float(np.std(self.by_knots) / self.true_pmp / np.sqrt(len(self.by_knots)))


def noise_rows(name: str, seeds: int) -> Iterator[Row]:
    found = agreement(name, seeds)
    yield Row(f"{name}: Pmp scatter over pairs'", found.ratio, "1", OVER_PAIRS, at_least=False)
    yield Row(f"{name}: Pmp bias", 100.0 * abs(found.bias), "%", BIAS, at_least=False)
    yield Row(f"{name}: bias is known to", 100.0 * found.bias_sigma, "%", None)


def agreement(name: str, seeds: int, knots: int = NOISY_KNOTS) -> Agreement:
    """12-bit codes through the firmware and the host."""
    made = source(name)
    count = int(made.end_s / (1e-9 * PAIR_NS))
    by_knots, by_pairs = [], []
    for seed in range(seeds):
        codes = codes_of(made, seed=seed, noise=NOISE, count=count)
        raw, bin_pairs = placing.sent(codes, knots)
        by_knots.append(figures_of(convert_raw(made, raw, bin_pairs)).pmp.value)
        by_pairs.append(of_pairs(made, codes, NOISE).pmp.value)
    return Agreement(made.truth["pmp"], np.array(by_knots), np.array(by_pairs))
