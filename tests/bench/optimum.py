"""How near straight lines between points of a curve can come to it, at best.

Comes in: a curve in the plane, as a fine sequence of points. Goes out: the least tolerance that
so many of them keep, the first and the last among them, by a search that leaves none out.

From each point, the points that a straight line reaches within the tolerance are found by
narrowing the angle that still passes all those between (Imai and Iri, "Computational-geometric
methods for polygonal approximations of a curve", 1986, from memory); then fewest steps.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]

CANDIDATES = 2500
PRECISION = 1.005
"""Of the optimum: it is at most so much larger than the least tolerance that is possible."""


def candidates(x: Floats, y: Floats, count: int = CANDIDATES) -> tuple[Floats, Floats]:
    """Points of a curve, half of them by its length and half by the root of its bend."""
    length = np.concatenate(([0.0], np.cumsum(np.hypot(np.diff(x), np.diff(y)))))
    even = np.linspace(0.0, length[-1], 3 * count)
    px, py = np.interp(even, length, x), np.interp(even, length, y)
    bend = np.sqrt(np.abs(np.gradient(np.unwrap(np.arctan2(np.diff(py), np.diff(px))))))
    share = np.concatenate(([0.0], np.cumsum(bend / bend.sum() + 1.0 / len(bend))))
    places = np.interp(np.linspace(0.0, share[-1], count), share, even)
    return np.interp(places, length, x), np.interp(places, length, y)


def fewest_points(x: Floats, y: Floats, tolerance: float) -> int:
    """Of all ways to choose among the points: how many keep the tolerance."""
    last = len(x) - 1
    steps = np.full(last + 1, last + 1)
    steps[0] = 0
    for start in range(last):
        dx, dy = x[start + 1 :] - x[start], y[start + 1 :] - y[start]
        angle, far = np.arctan2(dy, dx), np.hypot(dx, dy)
        free = np.arcsin(np.minimum(tolerance / far, 1.0))
        low = np.maximum.accumulate(np.where(far <= tolerance, -np.inf, angle - free))
        high = np.minimum.accumulate(np.where(far <= tolerance, np.inf, angle + free))
        reached = np.ones(len(angle), dtype=bool)  # the next point always is
        reached[1:] = (angle[1:] >= low[:-1]) & (angle[1:] <= high[:-1])
        ahead = steps[start + 1 :]
        ahead[reached] = np.minimum(ahead[reached], steps[start] + 1)
    return int(steps[last]) + 1


def feasible(x: Floats, y: Floats, points: int, tolerance: float) -> bool:
    """Whether any choice of so many of the points keeps the tolerance."""
    return fewest_points(x, y, tolerance) <= points


def optimum(x: Floats, y: Floats, points: int) -> float:
    """The least tolerance that so many points keep, to PRECISION."""
    low, high = 0.0, np.inf
    tolerance = 0.15 / points**2
    while high > PRECISION * low:
        needed = fewest_points(x, y, tolerance)
        if needed <= points:
            high = tolerance
        else:
            low = tolerance
        if low and np.isfinite(high):
            tolerance = float(np.sqrt(low * high))
        else:
            # The error of a line falls with the square of the number of points.
            margin = 0.98 if high <= tolerance else 1.02
            tolerance *= margin * ((needed - 1.0) / (points - 1.0)) ** 2
    return float(high)


def distances(at_x: Floats, at_y: Floats, x: Floats, y: Floats) -> Floats:
    """Of the points (x, y) of a falling curve from the straight lines between knots `at`.

    Looked for near by: on the line that a point lies beside and on the two next to it.
    """
    along, knots = x - y, at_x - at_y
    beside = np.searchsorted(np.maximum.accumulate(knots), along) - 1
    least = np.full(len(x), np.inf)
    for shift in (-1, 0, 1):
        a = np.clip(beside + shift, 0, len(at_x) - 2)
        dx, dy = at_x[a + 1] - at_x[a], at_y[a + 1] - at_y[a]
        square = np.maximum(dx * dx + dy * dy, 1e-300)
        share = np.clip(((x - at_x[a]) * dx + (y - at_y[a]) * dy) / square, 0.0, 1.0)
        least = np.minimum(least, np.hypot(x - at_x[a] - share * dx, y - at_y[a] - share * dy))
    return least
