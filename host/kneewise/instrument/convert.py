"""From raw knots to points of the curve in volts, amperes and seconds.

Comes in: knots as sums of codes, and the board's numbers. Goes out: points of the curve, each
at the instant of a knot's middle. What is taken out, in this order:

- the wide codes of the RP2040's converter (`linearity.py`), from the knots and from the
  readings before closing;
- zeros and scale factors;
- the bend: a knot is the mean of a bent stretch and lies inside it (`curve/unbend.py`);
- the skew: a pair's current is converted after its voltage, and each channel has a delay. The
  voltage is moved along its own slope to the instant of the current, since V(t) is the
  smoother of the two: on a capacitor a step of the current is but a corner of the voltage;
- the divider's own current, and lead resistance where sensing is two-wire.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import CubicHermiteSpline

from kneewise.curve.unbend import Cells, slopes, unbend
from kneewise.instrument.linearity import WIDE_CODES, Linearity
from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import Counts, Floats, RawKnots, Reading

QUANTIZING_VARIANCE = 1 / 12  # code^2, of an ideal converter without noise
SLOPE_PAIRS = 8
"""Pairs on either side of a knot, at least, that its slope is taken from."""
FEWEST_TERMS = 32
"""Second differences in a run of knots, at least, for it to tell the noise on the whole."""
TERMS_A_FREEDOM = 1.94
"""Second differences of white noise are correlated by -2/3 and 1/6: 1 + 2 (4/9 + 1/36)."""
POOLED_TERMS = 32
"""Weight of the whole sweep's variance in that of each knot: few differences tell little."""


@dataclass(frozen=True, slots=True)
class Converted:
    """Arrays of shape (n,), SI units; see `Trace`."""

    voltage: Floats
    current: Floats
    time: Floats
    weight: Floats
    voltage_sigma: Floats
    current_sigma: Floats
    voc_static: float
    """V, from the reading before closing."""
    voltage_zero_code: float
    current_zero_code: float
    """Ideal codes at 0 V and 0 A that were used."""


@dataclass(frozen=True, slots=True)
class _Channel:
    """Knots of one channel: means in ideal codes with their standard deviations, shape (n,)."""

    means: Floats
    sigmas: Floats
    noise: float
    """Standard deviation of one conversion, codes."""
    line: Linearity | None
    """None where no code is wide."""

    @classmethod
    def of(
        cls, cells: Cells, sums: Counts, scatter: Counts, scales: Scales, bin_pairs: int
    ) -> _Channel:
        codes = sums / cells.samples
        sigmas, noise = _scatter(cells, codes, scatter, scales, bin_pairs)
        if scales.wide_code_lsb <= 1.0:
            return cls(codes, sigmas, noise, None)
        line = Linearity.of(scales.wide_code_lsb, scales.code_max, noise)
        straight = line.knots(cells, codes, sigmas)
        return cls(straight.means, straight.sigmas, noise, line)

    def reading(self, reading: Reading) -> float:
        """Ideal code of a reading before closing."""
        return self.line.reading(reading.code) if self.line else reading.code


def convert(
    raw: RawKnots,
    scales: Scales,
    *,
    static_voltage: Reading,
    zero_current: Reading,
    zero_voltage: Reading | None = None,
    pair_ns: int,
    skew_ns: int,
    bin_pairs: int,
) -> Converted:
    """Knots that follow each other without a gap, in SI units.

    `time` is that of the instants which the points belong to, those of the current's
    conversions less its channel's delay, from the first pair's voltage conversion on.
    Without `zero_voltage` the voltage's zero is the profile's.
    """
    cells = Cells.of(raw.pairs)
    pair_s = 1e-9 * pair_ns
    volts = _Channel.of(cells, raw.voltage_sum, raw.voltage_scatter, scales, bin_pairs)
    amperes = _Channel.of(cells, raw.current_sum, raw.current_scatter, scales, bin_pairs)
    instant_s = skew_ns * 1e-9 - scales.current_delay_s
    voltage, voltage_sigma = _moved(cells, volts, (instant_s + scales.voltage_delay_s) / pair_s)
    current, current_sigma = unbend(cells, amperes.means, amperes.sigmas)
    zero_i = amperes.reading(zero_current)
    zero_v = volts.reading(zero_voltage) if zero_voltage else scales.voltage_zero_code
    voltage = (voltage - zero_v) * scales.voltage_v_per_code
    current = (current - zero_i) * scales.current_a_per_code
    current = current + voltage / scales.divider_ohm
    voltage = voltage + current * scales.lead_ohm
    return Converted(
        voltage=voltage,
        current=current,
        time=cells.middles * pair_s + instant_s,
        weight=cells.samples.astype(np.float64),
        voltage_sigma=voltage_sigma * scales.voltage_v_per_code,
        current_sigma=current_sigma * scales.current_a_per_code,
        voc_static=(volts.reading(static_voltage) - zero_v) * scales.voltage_v_per_code,
        voltage_zero_code=zero_v,
        current_zero_code=zero_i,
    )


def _moved(cells: Cells, channel: _Channel, later: float) -> tuple[Floats, Floats]:
    """Values `later` pairs after the knots' middles, and their standard deviations."""
    points, sigmas = unbend(cells, channel.means, channel.sigmas)
    if later == 0.0 or len(cells) < 2:
        return points, sigmas
    slope, noise = slopes(cells, channel.means, SLOPE_PAIRS)
    wanted = cells.middles + later
    inside = np.clip(wanted, cells.middles[0], cells.middles[-1])
    moved = CubicHermiteSpline(cells.middles, points, slope)(inside)
    moved = moved + (wanted - inside) * np.where(wanted > inside, slope[-1], slope[0])
    return moved, np.hypot(sigmas, later * noise * channel.noise)


def _scatter(
    cells: Cells, codes: Floats, scatter: Counts, scales: Scales, bin_pairs: int
) -> tuple[Floats, float]:
    """Standard deviations (codes) of the knots' means, and of a conversion on the whole.

    Second differences of successive bins, uncorrelated, have six times the variance of a bin, and
    a bin's sum has that of a conversion times its pairs; a ramp does not add to them (after von
    Neumann, Annals of Mathematical Statistics 12 (1941) 367, from memory). On the whole the median
    over runs of knots counts, since a corner adds to those of the run that it lies in; it is below
    the mean as that of chi-squared is (Wilson and Hilferty, Proc. Natl. Acad. Sci. 17 (1931) 684,
    from memory).
    """
    pairs = cells.samples
    after = np.cumsum(pairs) // bin_pairs
    terms = np.diff(np.maximum(after, 2.0), prepend=2.0)  # the first two bins have none
    sums = scatter.astype(np.float64) / (6.0 * bin_pairs)
    # Within a wide code nothing scatters, whatever the noise is.
    wide = _meets_wide_code(cells, codes) if scales.wide_code_lsb > 1.0 else np.zeros(len(cells))
    told = (terms > 0) & (wide == 0)
    if not told.any():
        told = terms > 0
    whole = _over_runs(sums[told], terms[told]) if told.any() else QUANTIZING_VARIANCE
    each = (sums + POOLED_TERMS * whole) / (terms + POOLED_TERMS)
    sigmas = np.sqrt(np.maximum(each, QUANTIZING_VARIANCE) / pairs)
    return sigmas, float(np.sqrt(max(whole - QUANTIZING_VARIANCE, 0.0)))


def _over_runs(sums: Floats, terms: Floats) -> float:
    """Median over runs of knots of their mean term; sums and terms are those of the knots."""
    home = ((np.cumsum(terms) - terms) // FEWEST_TERMS).astype(np.int64)
    starts = np.flatnonzero(np.diff(home, prepend=-1))
    many = np.add.reduceat(terms, starts)
    means = np.add.reduceat(sums, starts) / many
    return float(np.median(means / (1.0 - 2.0 * TERMS_A_FREEDOM / (9.0 * many)) ** 3))


def _meets_wide_code(cells: Cells, codes: Floats) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """True for knots that run through a wide code or stand beside one."""
    borders = cells.border_values(codes)
    low, high = np.minimum(borders[:-1], borders[1:]), np.maximum(borders[:-1], borders[1:])
    wide = np.array(WIDE_CODES, dtype=np.float64)[:, None]
    return np.asarray(((low < wide + 4.0) & (high > wide - 4.0)).any(axis=0))
