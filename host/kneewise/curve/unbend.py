"""From means over stretches of time to points of the curve.

Comes in: one quantity as the means of consecutive cells (knots), each over a whole number of
samples at an even pace. Goes out: its values at given instants, as a rule the cells' middles.
The mean of a bent stretch lies inside the bend, by T^2/24 of the second derivative of a cell of
length T; that is what is taken out here. Volts, amperes and codes do not belong here.

How: beside each cell two neighbours on either side are looked at, each a run of cells at least
as long as the cell itself, so that a long cell among short ones is not judged by their noise.
The polynomial of degree four with the same five means gives the middle value (reconstruction
from cell averages as in finite-volume schemes: Colella and Woodward, J. Comput. Phys. 54
(1984) 174; from memory). Where five do not fit, or noise would grow by more than
`MOST_NOISE`, a parabola through three; where that is too noisy as well, a part of its
correction.

The two cells at the ends have neighbours on one side only. The last one lasts long while the
current dies: there it is an exponential with the last three means, and so it is in the cell
before, and in the third where five do not fit. The first one is nearly straight: a line and the
beginning of an exponential with the first four means.

At a corner much sharper than a cell no polynomial is right. A correction counts only as far
as the three parabolas through the cell agree on it (to a factor of `_AGREE`). Where they differ
in sign, the parabola through the cells right beside it counts, as far as noise allows. And the
point stays between the values at the cell's two borders, drawn straight between the means: so
nothing overshoots, and means that only rise (or only fall) become points that do. Half a
standard deviation is left free, so that the limits do not act on noise.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import exp, expm1, sinh

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Flags = npt.NDArray[np.bool_]
Stencil = npt.NDArray[np.int64]
"""Numbers of runs in `_Around`: 0 and 1 before the cell, 2 the cell, 3 and 4 behind it."""

MOST_NOISE = 1.15
"""A point's standard deviation over that of its cell's mean, at most."""
MOST_END_NOISE = 1.4
"""The same of the last point: its cell is long, so its noise is small and its bend large."""
_AGREE = 4.0
"""Bends of an exponential that grows e-fold from cell to cell differ by 2.7, those at a corner
by any factor."""
_OUT_OF_RANGE = 500.0
"""Exponent over three end cells: beyond it they hold a step, and no end dies so."""
_FREE_SIGMAS = 0.5
_STEEPEST = 20.0
"""Of the exponential in an end cell: e-folds within the cell."""


@dataclass(frozen=True, slots=True)
class Cells:
    """Consecutive cells of `samples` each, shape (n,). Times are in samples from the first."""

    samples: Ints
    borders: Ints
    """Shape (n + 1,), the first 0."""
    middles: Floats

    @classmethod
    def of(cls, samples: npt.ArrayLike) -> Cells:
        counts = np.asarray(samples, dtype=np.int64)
        borders = np.concatenate(([0], np.cumsum(counts)))
        return cls(counts, borders, 0.5 * (borders[1:] + borders[:-1] - 1))

    def __len__(self) -> int:
        return len(self.samples)

    def sums(self, means: Floats) -> Floats:
        """Of all samples before each border, each less the first mean; shape (n + 1,)."""
        return np.concatenate(([0.0], np.cumsum((means - means[0]) * self.samples)))

    def border_values(self, means: Floats) -> Floats:
        """Straight between the means, shape (n + 1,); the ends take the end cells' means."""
        share = self.samples[:-1] / (self.samples[:-1] + self.samples[1:])
        between = means[:-1] + np.diff(means) * share
        return np.concatenate((means[:1], between, means[-1:]))


def unbend(cells: Cells, means: Floats, sigmas: Floats) -> tuple[Floats, Floats]:
    """Values at the cells' middles and their standard deviations, shape (n,) each.

    `sigmas` are those of the means, independent of each other. A cell of one sample stays as
    it is. Fewer than four cells do as well.
    """
    if len(cells) < 4 or int(cells.samples.max()) == 1:
        return means, sigmas
    around = _Around.of(cells, means, cells.samples)
    correction, noise = around.correction([_QUARTIC, _ACROSS])
    last = cells.samples[:-4:-1], means[:-4:-1]
    near_end = [-2] if around.there[-3].all() else [-2, -3]
    for at in near_end:
        correction[at], noise[at] = _end_correction(_dying, *last, -1 - at, MOST_NOISE)
    low, high, corner = around.bounds()
    low[near_end], high[near_end], corner[near_end] = -np.inf, np.inf, False
    beside = _Around.of(cells, means, 1)
    able, share = beside.parabola(_ACROSS)
    low = np.where(able, np.maximum(low, np.minimum(_AGREE * share, 0.0)), low)
    high = np.where(able, np.minimum(high, np.maximum(_AGREE * share, 0.0)), high)
    # There, who stands beside the cell knows more than who stands farther off.
    nearer = [array[corner] for array in (*beside.correction([_ACROSS]), *beside.bounds()[:2])]
    correction[corner], noise[corner], low[corner], high[corner] = nearer
    free = _FREE_SIGMAS * sigmas
    correction = np.clip(correction, low - free, high + free)
    first = cells.samples[:4], means[:4]
    correction[0], noise[0] = _end_correction(_growing, *first, 0, MOST_NOISE)
    correction[-1], noise[-1] = _end_correction(_dying, *last, 0, MOST_END_NOISE)
    points = _between_borders(cells, means, means + correction, _FREE_SIGMAS * sigmas)
    return points, sigmas * noise


def _end_correction(
    rule: Callable[[Floats, Floats, int], float],
    samples: npt.ArrayLike,
    means: Floats,
    at: int,
    most_noise: float,
) -> tuple[float, float]:
    """Of number `at` of a few runs, the outermost first, as `_Around.correction` gives it."""
    long = np.asarray(samples, dtype=np.float64)
    if long[at] == 1.0:
        return 0.0, 1.0
    whole = rule(long, means, at)
    # What noise makes of it, by moving each mean a little.
    step = 1e-4 * float(np.ptp(means)) or 1.0
    moved = [rule(long, means + step * row, at) for row in np.eye(len(means))]
    pulls = (np.array(moved) - whole) / step
    for part in 0.8 ** np.arange(30):
        share = part * pulls
        share[at] += 1.0
        noise = float(np.sqrt(np.sum(share**2 * long[at] / long)))
        if noise <= most_noise:
            return float(part) * whole, noise
    return 0.0, 1.0


def _dying(samples: Floats, means: Floats, at: int) -> float:
    """Middle value less mean of one of three cells, for a + b exp(c x) with their means."""
    long = (samples / samples[0]).tolist()
    edges = [-0.5, 0.5, 0.5 + long[1], 0.5 + long[1] + long[2]]
    found = _exponential(edges, float(means[1] - means[0]), float(means[2] - means[1]))
    if found is None:
        return 0.0
    b, c = found
    if abs(c) * edges[-1] > _OUT_OF_RANGE:
        return 0.0
    sample, own = c / float(samples[0]), c * float(long[at])
    inside = 2.0 * sinh(0.5 * sample) / sample - 2.0 * sinh(0.5 * own) / own
    return b * exp(0.5 * c * (edges[at] + edges[at + 1])) * inside


def _growing(samples: Floats, means: Floats, at: int) -> float:
    """The same of the first of four cells, for a + b x + d exp(c x): slopes are an exponential.

    At the start of a sweep the line is the shunt resistance and the exponential the knee.
    """
    long = (samples / samples[0]).tolist()
    edges = [0.0]
    for before, behind in pairwise(long):
        edges.append(edges[-1] + 0.5 * (before + behind))
    slopes = np.diff(means) / np.diff(edges)
    found = _exponential(edges, float(slopes[1] - slopes[0]), float(slopes[2] - slopes[1]))
    if found is None:
        return 0.0
    b, c = found
    return -b * c * (1.0 - 1.0 / float(samples[at]) ** 2) / 24.0


def _exponential(edges: list[float], first: float, second: float) -> tuple[float, float] | None:
    """b and c of a + b exp(c x) whose means over three cells rise by `first`, then `second`.

    None where they turn round: then no such function has them.
    """
    if first * second <= 0.0:
        return None
    low, high = -_STEEPEST, min(_STEEPEST, 300.0 / edges[-1])
    while True:
        c = 0.5 * (low + high)
        if abs(c) < 1e-9:
            c = 1e-9  # a straight line, but for the digits
        at = [expm1(c * edge) / c for edge in edges]
        own, near, far = (
            (at[number + 1] - at[number]) / (edges[number + 1] - edges[number])
            for number in range(3)
        )
        if high - low < 1e-7:
            return first / (near - own), c
        if (far - near) / (near - own) < second / first:
            low = c
        else:
            high = c


def slopes(cells: Cells, means: Floats, reach: int) -> tuple[Floats, Floats]:
    """Mean slope over each cell, per sample, and how far noise moves it: shape (n,) each.

    From the neighbours on either side, each a run of cells at least `reach` samples long and
    as long as the cell, where there are as many. The second result times the standard
    deviation of one sample is the slope's.
    """
    count = len(cells)
    if count < 2:
        return np.zeros(count), np.zeros(count)
    at, borders, total = np.arange(count), cells.borders, cells.sums(means)
    long = np.maximum(cells.samples, reach)
    # At an end the cell stands for the neighbour that it has not.
    begin = np.searchsorted(borders, borders[at] - long, side="right") - 1
    begin, begin_end = np.maximum(begin, 0), np.maximum(at, 1)
    end = np.minimum(np.searchsorted(borders, borders[at + 1] + long, side="left"), count)
    end_begin = np.minimum(at + 1, count - 1)
    left, right = borders[begin_end] - borders[begin], borders[end] - borders[end_begin]
    apart = 0.5 * (borders[end] + borders[end_begin] - borders[begin_end] - borders[begin])
    before = (total[begin_end] - total[begin]) / left
    behind = (total[end] - total[end_begin]) / right
    return (behind - before) / apart, np.sqrt(1.0 / left + 1.0 / right) / apart


def _between_borders(cells: Cells, means: Floats, points: Floats, free: Floats) -> Floats:
    """No point leaves what its borders allow; `free` holds where the means turn round."""
    borders = cells.border_values(means)
    low = np.minimum(np.minimum(borders[:-1], borders[1:]), means)
    high = np.maximum(np.maximum(borders[:-1], borders[1:]), means)
    turns = np.zeros(len(means), dtype=bool)
    turns[1:-1] = (means[1:-1] - means[:-2]) * (means[2:] - means[1:-1]) < 0.0
    free = np.where(turns, free, 0.0)
    # An end cell has one neighbour: the straight line through both means bounds the other side.
    for end, border in ((0, borders[1]), (-1, borders[-2])):
        far = 2.0 * means[end] - border
        low[end], high[end] = min(border, far), max(border, far)
    limited: Floats = np.clip(points, low - free, high + free)
    return limited


@dataclass(frozen=True, slots=True)
class _Around:
    """For each cell two runs before it, itself, and two runs behind: shape (n, 5)."""

    there: Flags
    samples: Floats
    middle: Floats
    mean: Floats

    @classmethod
    def of(cls, cells: Cells, means: Floats, reach: npt.ArrayLike) -> _Around:
        """Runs are at least `reach` samples long."""
        borders, count = cells.borders, len(cells)
        total = cells.sums(means)
        long = np.broadcast_to(np.asarray(reach), (count,))
        at = np.arange(count)
        left = np.searchsorted(borders, borders[at] - long, side="right") - 1
        farther = np.searchsorted(borders, borders[np.maximum(left, 0)] - long, side="right") - 1
        right = np.searchsorted(borders, borders[at + 1] + long, side="left")
        beyond = np.searchsorted(borders, borders[np.minimum(right, count)] + long, side="left")
        edges = np.stack([farther, left, at, at + 1, right, beyond], axis=1)
        inside = (edges >= 0) & (edges <= count)
        edges = np.clip(edges, 0, count)
        samples = np.diff(borders[edges], axis=1).astype(np.float64)
        there = inside[:, 1:] & inside[:, :-1] & (samples > 0)
        middle = 0.5 * (borders[edges][:, 1:] + borders[edges][:, :-1] - 1)
        mean = np.diff(total[edges], axis=1) / np.maximum(samples, 1.0) + means[0]
        mean[:, 2] = means
        return cls(there, samples, middle - cells.middles[:, None], mean)

    def correction(self, stencils: Sequence[Stencil]) -> tuple[Floats, Floats]:
        """Middle value less mean, and the noise of their sum over that of the mean."""
        count = len(self.mean)
        weights = np.zeros((count, 5))
        weights[:, 2] = 1.0
        wanting = self.samples[:, 2] > 1
        for runs in stencils:
            able: Flags = self.there[:, runs].all(axis=1) & wanting
            some = np.zeros((count, 5))
            some[np.ix_(able, runs)] = self._middle_weights(able, runs)
            good = able & (self._noise(some) <= MOST_NOISE)
            if len(runs) == 3:
                # The last resort: as much of the correction as noise allows.
                some[able] = self._part(some, weights, able)
                good = able
            weights[good] = some[good]
            wanting &= ~good
        correction: Floats = np.einsum("ij,ij->i", weights, self.mean - self.mean[:, 2:3])
        return correction, self._noise(weights)

    def _middle_weights(self, able: Flags, runs: Stencil) -> Floats:
        """Weights of the runs' means in the middle value, by the polynomial that has them."""
        scale = self.samples[able, 2]
        at = self.middle[np.ix_(able, runs)] / scale[:, None]
        long = self.samples[np.ix_(able, runs)] / scale[:, None]
        powers = _mean_powers(at, long)[..., : len(runs)]
        sample = _mean_powers(np.zeros_like(scale), 1.0 / scale)[:, : len(runs)]
        solved = np.linalg.solve(powers.transpose(0, 2, 1), sample[..., None])[..., 0]
        return np.asarray(solved, dtype=np.float64)

    def _noise(self, weights: Floats) -> Floats:
        own = self.samples[:, 2:3]
        share: Floats = np.sqrt(np.sum(weights**2 * own / np.maximum(self.samples, 1.0), axis=1))
        return share

    def _part(self, full: Floats, none: Floats, able: Flags) -> Floats:
        """Between `none` and `full`, as far as MOST_NOISE lets."""
        part = np.ones(len(full))
        for _ in range(30):
            noisy = self._noise(none + part[:, None] * (full - none)) > MOST_NOISE
            if not noisy[able].any():
                break
            part[noisy] *= 0.8
        mixed: Floats = (none + part[:, None] * (full - none))[able]
        return mixed

    def bounds(self) -> tuple[Floats, Floats, Flags]:
        """Between which a correction is one that all the parabolas share; and where they differ.

        Where the bend turns round, or at a corner, they differ in sign: then the middle one.
        """
        shares = [self.parabola(runs) for runs in (_LEFT, _ACROSS, _RIGHT)]
        low, high = np.full(len(self.mean), -np.inf), np.full(len(self.mean), np.inf)
        for able, share in shares:
            low = np.where(able, np.maximum(low, np.minimum(_AGREE * share, 0.0)), low)
            high = np.where(able, np.minimum(high, np.maximum(_AGREE * share, 0.0)), high)
        all_able = np.asarray(np.all([able for able, _share in shares], axis=0))
        three = np.sort([np.where(able, share, 0.0) for able, share in shares], axis=0)
        middle = np.where(all_able, three[1], 0.0)
        differ = np.asarray(three[0] * three[2] < 0.0)
        return np.minimum(low, middle), np.maximum(high, middle), differ

    def parabola(self, runs: Stencil) -> tuple[Flags, Floats]:
        """Where one can be laid through `runs`, and its middle value less the mean."""
        able = np.asarray(self.there[:, runs].all(axis=1))
        weights = np.zeros_like(self.mean)
        weights[np.ix_(able, runs)] = self._middle_weights(able, runs)
        share: Floats = np.einsum("ij,ij->i", weights, self.mean - self.mean[:, 2:3])
        return able, share


_QUARTIC: Stencil = np.arange(5)
_LEFT: Stencil = np.arange(0, 3)
_ACROSS: Stencil = np.arange(1, 4)
_RIGHT: Stencil = np.arange(2, 5)


def _mean_powers(at: Floats, long: Floats) -> Floats:
    """Means of 1, x, x^2, x^3, x^4 over stretches `long` round `at`, shape (..., 5)."""
    second, fourth = long**2 / 12.0, long**4 / 80.0
    cubic = at**3 + 3.0 * at * second
    quartic = at**4 + 6.0 * at**2 * second + fourth
    return np.stack([np.ones_like(at), at, at**2 + second, cubic, quartic], axis=-1)
