"""What a converter's wide codes do to a knot's mean, and taking it out again.

Comes in: mean codes of knots, each over a stretch along which the input runs, and the noise.
Goes out: mean inputs in ideal codes, where one is the range divided by the number of codes and
`profile.py`'s zeros and scales apply. Volts and amperes do not belong here.

The RP2040's converter holds four codes, 511, 1535, 2559 and 3583, much longer than the others
(erratum RP2040-E11 in its data sheet; about 9 ideal codes instead of 1). The others are
narrower by the same amount in all, so that the range keeps its ends: code 0 begins where an
ideal converter's would, and code 4095 ends there. This straight line between the ends is the
one that a profile's `per_code` and `zero` mean. A calibration that fits its line through
readings corrected here finds it; through uncorrected readings it errs by up to 4 codes.

Method: the expected code for an input x with Gaussian noise is the staircase of the code
widths, convolved with the noise. Less x it is the excess E(x): a saw of 4 codes up and down,
with the staircase's own ripple. A knot's mean code is the mean of x + E(x) over the stretch
that the input runs through, from the knot's left border over its middle to its right border,
all taken from the means of its neighbours. So the mean of E over that stretch is subtracted,
by its integral in a table, and again with the improved means, a few times.

Where a whole knot lies within one wide code, as with the current near 0 V on a stiff source,
its mean says only that. Such a knot is set between its neighbours, as far as its code allows,
and its standard deviation grows to that of an even spread over the code.

What is left, by simulation with a straight line calibrated through corrected readings, and 64
knots of a module of 40 V and 9 A on a range of 67 V and 21 A (`tests/host/test_linearity.py`).
Each: root mean square and largest error of a knot in codes, with the noise, and of Pmp.

    real widths       noise   1000 W/m2                   100 W/m2
    as assumed, 9     0.3     0.1, 0.3 codes, 0.004 %     0.03, 0.1 codes, 0.012 %
    as assumed, 9     1.2     0.3, 1.0 codes, 0.009 %     0.1, 0.3 codes, 0.022 %
    9 +- 2 each       0.3     1.9, 2.3 codes, 0.21 %      1.0, 1.5 codes, 0.12 %
    9 +- 2 each       1.2     1.9, 2.7 codes, 0.21 %      1.0, 1.5 codes, 0.13 %
    the same, left    0.3     2.7, 5.7 codes, 0.27 %      1.7, 4.6 codes, 0.79 %
    the same, left    1.2     2.8, 5.7 codes, 0.27 %      1.7, 4.6 codes, 0.75 %
    9 each, left      0.3     2.0, 4.3 codes, 0.16 %      1.4, 4.1 codes, 0.79 %
    9 each, left      1.2     2.1, 4.4 codes, 0.16 %      1.4, 4.1 codes, 0.75 %

The +- 2 is a standard deviation, over 40 boards; of largest errors the median is given, and one
board in twenty has twice that. "Left" means not taken out. Without the calibrated line, on the
ends of the range alone, Pmp errs by a quarter more.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from kneewise.curve.unbend import Cells

Floats = npt.NDArray[np.float64]

WIDE_CODES = (511, 1535, 2559, 3583)
LEAST_NOISE = 0.25
"""Codes. With less, and a still input, the staircase is too steep to be inverted; the ripple of
0.1 codes that it leaves there is let be."""
_STEPS = 16  # of the table, in an ideal code
_MARGIN = 16  # codes beyond the ends, for noise and steps that lead there
_ROUNDS = 12
_UNSURE = 0.3
"""Codes that a mean moves for one code of the input: with less, its neighbours know better."""


@dataclass(frozen=True, slots=True)
class Straight:
    """Mean inputs in ideal codes, and the standard deviations of them; shape (n,)."""

    means: Floats
    sigmas: Floats


@dataclass(frozen=True, slots=True)
class Linearity:
    """One channel's converter with its noise. Tables hold `_STEPS` places a code."""

    edges: Floats
    """The input below each code from 1 on, in ideal codes."""
    wide_lsb: float
    places: Floats
    integral: Floats
    """Of E, from the first place."""

    @classmethod
    def of(cls, wide_lsb: float, code_max: int, noise: float) -> Linearity:
        """For wide codes of `wide_lsb` ideal codes and Gaussian noise of `noise` codes."""
        return _table(wide_lsb, code_max, round(max(noise, LEAST_NOISE), 2))

    def reading(self, code: float) -> float:
        """The input for the mean code of a still input."""
        return float(self.knots(Cells.of([1]), np.array([code]), np.zeros(1)).means[0])

    def knots(self, cells: Cells, codes: Floats, sigmas: Floats) -> Straight:
        """The mean inputs for knots' mean codes with standard deviations `sigmas`."""
        means = np.interp(codes, np.arange(len(self.edges) - 1) + 1.0, self._centres())
        means, moves = self._solved(cells, codes, means)
        unsure = moves < _UNSURE
        if unsure.any() and not unsure.all():
            code = np.clip(np.rint(codes[unsure]).astype(np.int64), 1, len(self.edges) - 1)
            between = _carried_on(cells.middles, means, unsure)
            means[unsure] = np.clip(between, self.edges[code - 1], self.edges[code])
            means, moves = self._solved(cells, codes, means)
        widest = np.hypot(sigmas, self.wide_lsb / np.sqrt(12.0))
        return Straight(means, np.minimum(sigmas / np.maximum(moves, 1e-3), widest))

    def _centres(self) -> Floats:
        """Input in the middle of each code from 1 on."""
        centres: Floats = 0.5 * (self.edges[1:] + self.edges[:-1])
        return centres

    def _solved(self, cells: Cells, codes: Floats, means: Floats) -> tuple[Floats, Floats]:
        """Means improved until codes and inputs agree, and how far a code moves for an input."""
        inner = (cells.samples - 1) / cells.samples
        moves = np.ones(len(codes))
        for _ in range(_ROUNDS):
            borders = cells.border_values(means)
            if len(cells) > 1:
                borders[0] = 2.0 * means[0] - borders[1]
                borders[-1] = 2.0 * means[-1] - borders[-2]
            begin, end = (borders[:-1] - means) * inner, (borders[1:] - means) * inner
            here, above, below = (
                0.5 * (self._mean(means + begin + by, means + by))
                + 0.5 * (self._mean(means + by, means + end + by))
                for by in (0.0, 0.5, -0.5)
            )
            moves = 1.0 + above - below
            means = means + (codes - means - here) / np.maximum(moves, _UNSURE)
        return means, moves

    def _mean(self, begin: Floats, end: Floats) -> Floats:
        """Mean of E over the inputs between `begin` and `end`, shape (n,)."""
        # Over less than a step of the table the difference would lose its digits.
        half = np.maximum(0.5 * np.abs(end - begin), 0.5 / _STEPS)
        middle = np.clip(0.5 * (begin + end), self.places[0] + half, self.places[-1] - half)
        low, high = middle - half, middle + half
        rise = np.interp(high, self.places, self.integral)
        rise = rise - np.interp(low, self.places, self.integral)
        return np.asarray(rise / (high - low), dtype=np.float64)


def _carried_on(middles: Floats, means: Floats, unsure: npt.NDArray[np.bool_]) -> Floats:
    """Straight from sure knot to sure knot; before the first and behind the last, the line
    through it and one as far away again."""
    at, known, wanted = middles[~unsure], means[~unsure], middles[unsure]
    between = np.interp(wanted, at, known)
    for outside, end in ((wanted < at[0], 0), (wanted > at[-1], -1)):
        if not outside.any() or len(at) < 2:
            continue
        far = float(np.abs(wanted[outside] - at[end]).max())
        other = int(np.abs(np.abs(at - at[end]) - far).argmin())
        if other == end % len(at):
            other = 1 if end == 0 else len(at) - 2
        slope = (known[other] - known[end]) / (at[other] - at[end])
        between[outside] = known[end] + slope * (wanted[outside] - at[end])
    return between


def edges(wide_lsb: float, code_max: int) -> Floats:
    """The input below each code from 1 to `code_max`, in ideal codes; code 0 begins at -0.5."""
    codes, wide = code_max + 1, len(WIDE_CODES)
    widths = np.full(codes, (codes - wide * wide_lsb) / (codes - wide))
    widths[list(WIDE_CODES)] = wide_lsb
    result: Floats = np.cumsum(widths)[:-1] - 0.5
    return result


@lru_cache(maxsize=16)
def _table(wide_lsb: float, code_max: int, noise: float) -> Linearity:
    below = edges(wide_lsb, code_max)
    places = np.arange(-_MARGIN * _STEPS, (code_max + _MARGIN) * _STEPS + 1) / _STEPS
    # The integral of the staircase is straight between its edges.
    corners = np.concatenate((places[:1], below, places[-1:]))
    codes = np.concatenate(([0.0], np.cumsum(np.diff(corners) * np.arange(len(below) + 1))))
    staircase = np.interp(places, corners, codes) - 0.5 * places**2
    still = np.diff(staircase) * _STEPS
    # Beyond the range the code stays and E would fall or rise without end.
    still = np.clip(still, -wide_lsb, wide_lsb)
    reach = int(np.ceil(5.0 * noise * _STEPS))
    kernel = np.exp(-0.5 * (np.arange(-reach, reach + 1) / (noise * _STEPS)) ** 2)
    smooth = np.convolve(np.pad(still, reach, mode="edge"), kernel / kernel.sum(), mode="valid")
    integral = np.concatenate(([0.0], np.cumsum(smooth) / _STEPS))
    return Linearity(below, wide_lsb, places, integral)
