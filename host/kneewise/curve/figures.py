"""Isc, Voc, maximum power and fill factor of one curve, with uncertainties.

Comes in: the knots of a capacitor sweep as points on the curve (`unbend.py` makes them of means
over many pairs), or every pair as a point. They stand densely at the knee and sparsely
elsewhere, the first one never at 0 V and the last one short of open circuit. Goes out:
`Figures`. No model of the module is assumed, no file and no device belongs here.

Every estimator is a weighted least-squares fit of a polynomial over a window of knots, so for
a given window it is linear in the data, and the uncertainties follow by linear propagation.
They hold what the scatter of the knots tells and nothing else: calibration, skew, temperature
and irradiance come on top, and are accounted for elsewhere.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from math import floor, log10, sqrt

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]

FEWEST_KNOTS = 8
_LINE_WINDOWS = (0.35, 0.25, 0.18, 0.12, 0.08)
"""Windows of the Isc line, upper edge over Voc. In the one of 0.18 the diode's share of the
current moves Isc by less than 0.02 % for single-diode curves with Voc / (n Ns Vt) >= 14, and by
less than 0.04 % where the sweep begins at 14 % of Voc. Narrower ones are for curves with a
step near 0 V, where a shaded substring lets its bypass diode conduct."""
_KNEE_DROP = 0.05
"""The window of the maximum: where power is within this fraction of the largest. With a
quartic in I(V) this keeps Pmp within 0.02 % of single-diode curves with fill factor 0.5 to
0.82; a cubic would be off by up to 0.06 %, a parabola by 0.25 %."""
_END_CURRENT = 0.12
"""Knots below this fraction of Isc serve to extrapolate Voc."""


class NoFigures(ValueError):
    """The curve is well formed but does not determine its figures; `reason` says why."""

    def __init__(self, reason: str) -> None:
        self.reason = reason
        super().__init__(reason)


@dataclass(frozen=True, slots=True)
class Quantity:
    """A value with its standard uncertainty, both in `unit` ("" for a ratio)."""

    value: float
    standard_uncertainty: float
    unit: str

    def __str__(self) -> str:
        """The value to the first digit that its uncertainty leaves in doubt, "9.187 A"."""
        return f"{self.value:.{self._decimals()}f} {self.unit}".rstrip()

    def _decimals(self) -> int:
        # Five significant digits at most: a small scatter does not make a good calibration.
        magnitude = floor(log10(abs(self.value))) if self.value else 0
        finest = 4 - magnitude
        if self.standard_uncertainty > 0.0:
            finest = min(finest, -floor(log10(self.standard_uncertainty)))
        return max(0, min(finest, 9))


@dataclass(frozen=True, slots=True)
class Figures:
    """What a curve comes down to. `ff` is pmp / (isc voc), and pmp = vmp imp."""

    isc: Quantity
    voc: Quantity
    imp: Quantity
    vmp: Quantity
    pmp: Quantity
    ff: Quantity
    isc_extrapolated_from_v: float
    """V, the lowest voltage that the extrapolation to 0 V rests on."""

    def named(self) -> Iterator[tuple[str, Quantity]]:
        """Name and quantity, in the order of the fields."""
        for name in ("isc", "voc", "imp", "vmp", "pmp", "ff"):
            yield name, getattr(self, name)

    def as_dict(self) -> dict[str, float]:
        """Values by name (A, V, W, 1), each with `<name>_standard_uncertainty` beside it."""
        numbers: dict[str, float] = {}
        for name, quantity in self.named():
            numbers[name] = quantity.value
            numbers[f"{name}_standard_uncertainty"] = quantity.standard_uncertainty
        numbers["isc_extrapolated_from_v"] = self.isc_extrapolated_from_v
        return numbers


def extract(
    voltage: npt.ArrayLike,
    current: npt.ArrayLike,
    *,
    weight: npt.ArrayLike,
    voltage_sigma: npt.ArrayLike,
    current_sigma: npt.ArrayLike,
    voc_static: float | None = None,
    voc_static_sigma: float | None = None,
) -> Figures:
    """The figures of one curve from its knots, arrays of shape (n,), n >= 8, in any order.

    `voltage` (V) and `current` (A) are points of the curve, `weight` what each counts for (the
    pairs that it comes from, 1 for a plain point), the sigmas their standard deviations (V, A).
    `voc_static` (V) is the source's voltage with nothing connected; its standard deviation is
    taken to be that of a typical knot where it is not given. Without it Voc is extrapolated.

    - Isc: a straight line through the knots of the lowest voltages, carried on to 0 V. Of a
      few windows the widest in which the scatter hides any curvature is used.
    - Maximum: a local polynomial of degree four in I(V) round the largest power. Of several
      maxima the highest counts.
    - Voc without `voc_static`: a parabola V(I) through the knots of the smallest currents.

    The standard uncertainties come from the knots' scatter alone, by linear propagation
    (JCGM 100:2008, 5.1) through the fits, correlations between figures included.

    Raises ValueError for arrays that are no curve (too few, not finite, unlike shapes), and
    its subclass `NoFigures` for a curve that does not show the figures.
    """
    knots = _Knots.of(voltage, current, weight, voltage_sigma, current_sigma)
    if voc_static is not None and not np.isfinite(voc_static):
        raise ValueError("voc_static is not finite")
    if not np.any(knots.current > 0.0) or knots.voltage[-1] <= 0.0:
        raise NoFigures("no knot shows both voltage and current: the source gives no power")
    knee = knots.knee_window()
    voc_guess = float(knots.voltage[-1]) if voc_static is None else voc_static
    isc, from_v = _short_circuit(knots, voc_guess, knots.voltage[knee.start : knee.stop].mean())
    if isc.value <= 5.0 * isc.sigma:
        raise NoFigures(
            f"the current near 0 V, {isc.value:.3g} A, does not stand out of its scatter, "
            f"{isc.sigma:.2g} A: the source is dark or a lead is open"
        )
    if voc_static is None:
        voc = _open_circuit(knots, isc.value)
    else:
        if voc_static_sigma is None:
            voc_static_sigma = float(np.median(knots.voltage_sigma))
        voc = _Estimate.constant(voc_static, voc_static_sigma, knots)
    if voc.value <= 5.0 * voc.sigma:
        raise NoFigures(f"the open-circuit voltage, {voc.value:.3g} V, does not stand out of noise")
    imp, vmp, pmp = _maximum(knots, knee)
    # Current does not rise with voltage, so beyond the last knot power stays below this.
    beyond = float(knots.current[-1]) * voc.value
    if beyond > pmp.value:
        raise NoFigures(
            f"the curve ends at {knots.voltage[-1]:.4g} V and {knots.current[-1]:.4g} A; beyond, "
            f"power may rise to {beyond:.4g} W again, above the {pmp.value:.4g} W seen"
        )
    ff = pmp.over(isc).over(voc)
    if not 0.0 < ff.value < 1.0:
        raise NoFigures(
            f"the fill factor comes out as {ff.value:.3g}, not between 0 and 1: "
            "the knots do not form the curve of a lone photovoltaic source"
        )
    return Figures(
        isc=isc.quantity("A"),
        voc=voc.quantity("V"),
        imp=imp.quantity("A"),
        vmp=vmp.quantity("V"),
        pmp=pmp.quantity("W"),
        ff=ff.quantity(""),
        isc_extrapolated_from_v=from_v,
    )


@dataclass(frozen=True, slots=True)
class _Knots:
    """Checked arrays of shape (n,), sorted by voltage."""

    voltage: Floats
    current: Floats
    weight: Floats
    voltage_sigma: Floats
    current_sigma: Floats

    @classmethod
    def of(cls, *columns: npt.ArrayLike) -> _Knots:
        names = ("voltage", "current", "weight", "voltage_sigma", "current_sigma")
        arrays = [np.asarray(column, dtype=np.float64) for column in columns]
        shape = arrays[0].shape
        for name, array in zip(names, arrays, strict=True):
            if array.ndim != 1 or array.shape != shape:
                raise ValueError(f"{name} has shape {array.shape}, voltage has {shape}")
            if not np.all(np.isfinite(array)):
                raise ValueError(f"{name} holds a number that is not finite")
        if shape[0] < FEWEST_KNOTS:
            raise ValueError(f"{shape[0]} knots are too few for figures; {FEWEST_KNOTS} are needed")
        if not np.all(arrays[2] > 0.0):
            raise ValueError("weight must be above zero for every knot")
        if np.any(arrays[3] < 0.0) or np.any(arrays[4] < 0.0):
            raise ValueError("a sigma is below zero")
        order = np.argsort(arrays[0], kind="stable")
        return cls(*(array[order] for array in arrays))

    def knee_window(self) -> slice:
        """The knots round the largest power, `_KNEE_DROP` down on both sides."""
        power = self._smooth_power()
        top = int(power.argmax())
        drop = _KNEE_DROP
        while True:
            low = _walk(power, top, -1, (1.0 - drop) * power[top])
            high = _walk(power, top, +1, (1.0 - drop) * power[top])
            # A quartic has five terms. Six knots leave it little to average, but among few
            # knots at a sharp knee the seventh may stand far down the curve.
            if high - low >= 5 or drop > 0.2:
                break
            drop *= 1.15
        threshold = 1.0 - 0.4 * _KNEE_DROP
        if power[high:].min() > threshold * power[top] or top == len(power) - 1:
            raise NoFigures(
                f"the curve ends at {self.voltage[-1]:.4g} V and {self.current[-1]:.4g} A "
                "without passing its maximum power"
            )
        if power[: low + 1].min() > threshold * power[top] or top == 0:
            raise NoFigures(
                f"the curve begins at {self.voltage[0]:.4g} V and {self.current[0]:.4g} A, "
                "past its maximum power"
            )
        return slice(low, high + 1)

    def _smooth_power(self) -> Floats:
        """Power of each knot, averaged over neighbours where knots are many and pairs few."""
        reach = len(self.voltage) // 48
        kernel = np.ones(2 * reach + 1)
        total = np.convolve(self.weight * self.voltage * self.current, kernel, "same")
        smooth: Floats = total / np.convolve(self.weight, kernel, "same")
        return smooth


def _walk(values: Floats, start: int, step: int, least: float) -> int:
    """The last index from `start` on, in direction `step`, that reaches above `least`.

    A knot does so with half of the way to its neighbour before it.
    """
    index = start
    while 0 <= index + step < len(values) and values[index] + values[index + step] >= 2.0 * least:
        index += step
    return index


@dataclass(frozen=True, slots=True)
class _Estimate:
    """A value and how it moves with each knot: `by_current` and `by_voltage` of shape (n,)."""

    value: float
    by_current: Floats
    by_voltage: Floats
    other_variance: float
    """Of what is not a knot: the static Voc."""
    knots: _Knots

    @classmethod
    def constant(cls, value: float, sigma: float, knots: _Knots) -> _Estimate:
        none = np.zeros_like(knots.voltage)
        return cls(value, none, none, sigma**2, knots)

    @property
    def sigma(self) -> float:
        variance = np.sum((self.by_current * self.knots.current_sigma) ** 2)
        variance += np.sum((self.by_voltage * self.knots.voltage_sigma) ** 2)
        return sqrt(float(variance) + self.other_variance)

    def over(self, other: _Estimate) -> _Estimate:
        """The quotient. What is not a knot must not stand in both."""
        value = self.value / other.value
        return _Estimate(
            value,
            (self.by_current - value * other.by_current) / other.value,
            (self.by_voltage - value * other.by_voltage) / other.value,
            (self.other_variance + value**2 * other.other_variance) / other.value**2,
            self.knots,
        )

    def quantity(self, unit: str) -> Quantity:
        return Quantity(float(self.value), self.sigma, unit)


@dataclass(frozen=True, slots=True)
class _Fit:
    """A polynomial y = sum c_k u^k, u = (x - centre) / scale, through the knots of a window.

    y is current and x voltage, or the other way round with `swapped`. `terms` (the c_k) has
    shape (m,), `pull` shape (m, k): terms = pull @ y for the k knots of the window.
    """

    knots: _Knots
    window: slice
    swapped: bool
    centre: float
    scale: float
    terms: Floats
    pull: Floats

    @classmethod
    def of(cls, knots: _Knots, window: slice, degree: int, *, swapped: bool = False) -> _Fit:
        x, y = (knots.current, knots.voltage) if swapped else (knots.voltage, knots.current)
        centre = float(x[window].mean())
        scale = float(np.ptp(x[window])) / 2.0
        if scale <= 0.0:
            raise NoFigures("knots stand on top of each other: no curve can be drawn")
        columns = np.vander((x[window] - centre) / scale, degree + 1, increasing=True)
        root = np.sqrt(knots.weight[window] / knots.weight[window].max())
        pull = np.linalg.pinv(columns * root[:, None]) * root
        return cls(knots, window, swapped, centre, scale, pull @ y[window], pull)

    def u(self, x: float | Floats) -> float | Floats:
        return (x - self.centre) / self.scale

    def powers(self, x: float | Floats, derivative: int = 0) -> Floats:
        """d-th derivative by x of 1, u, u^2, ... at `x`, shape (m,) or (m, k)."""
        unit = np.eye(len(self.terms))
        rows = np.polynomial.polynomial.polyder(unit, derivative) if derivative else unit
        values = np.polynomial.polynomial.polyval(self.u(x), rows, tensor=True)
        return np.asarray(values / self.scale**derivative, dtype=np.float64)

    def at(self, x: float, derivative: int = 0) -> float:
        """Value of the polynomial, or of its d-th derivative by x."""
        return float(self.powers(x, derivative) @ self.terms)

    def estimate(self, value: float, row: Floats) -> _Estimate:
        """An estimate that moves like `row` @ terms.

        An error dx of a knot acts on the fit like an error -y'(x) dx of its y.
        """
        x = self.knots.current if self.swapped else self.knots.voltage
        by_y = np.zeros_like(x)
        by_y[self.window] = row @ self.pull
        by_x = np.zeros_like(x)
        by_x[self.window] = -by_y[self.window] * (self.terms @ self.powers(x[self.window], 1))
        by_current, by_voltage = (by_x, by_y) if self.swapped else (by_y, by_x)
        return _Estimate(value, by_current, by_voltage, 0.0, self.knots)


def _short_circuit(knots: _Knots, voc: float, knee_v: float) -> tuple[_Estimate, float]:
    """Isc by a straight line, and the lowest voltage it rests on."""
    voltage = knots.voltage
    # Two knots make a line; both must lie before the bend.
    straight = int(np.sum(voltage < 0.85 * knee_v))
    if straight < 2:
        raise NoFigures(
            f"the first knots stand at {voltage[0]:.4g} V and {voltage[1]:.4g} V, too near the "
            f"knee at {knee_v:.4g} V to extrapolate to Isc"
        )
    # A sweep that begins late needs a wider window for the same leverage.
    start = 0.5 * max(0.0, float(voltage[0]))
    counts = [int(np.sum(voltage < edge * voc + start)) for edge in _LINE_WINDOWS]
    if counts[0] < 3 and voltage[2] < 0.4 * voc:
        counts.insert(0, 3)
    windows = [slice(0, max(2, min(count, straight))) for count in counts]
    if windows[-1].stop > 3 and voltage[2] > voltage[0]:
        windows.append(slice(0, 3))
    chosen = next((window for window in windows if not _bends(knots, window)), windows[-1])
    line = _Fit.of(knots, chosen, 1)
    return line.estimate(line.at(0.0), line.powers(0.0)), float(voltage[0])


def _bends(knots: _Knots, window: slice) -> bool:
    """True where a parabola through the window shows a curvature that is no scatter."""
    if window.stop < 3:
        return False
    parabola = _Fit.of(knots, window, 2)
    curvature = parabola.estimate(float(parabola.terms[2]), np.array([0.0, 0.0, 1.0]))
    return abs(curvature.value) > 2.0 * curvature.sigma


def _maximum(knots: _Knots, window: slice) -> tuple[_Estimate, _Estimate, _Estimate]:
    """Imp, Vmp and Pmp from the knots in `window`."""
    count = window.stop - window.start
    if count < 4:
        raise NoFigures(f"only {count} knots stand near the maximum power; 4 are needed")
    fit = _Fit.of(knots, window, 4 if count >= 6 else 3 if count >= 5 else 2)
    v = _top(fit)
    i, slope, bend = fit.at(v), fit.at(v, 1), fit.at(v, 2)
    here, tilt = fit.powers(v), fit.powers(v, 1)
    # At the maximum I + V I' = 0; differentiated, dV = -(dI + V dI') / (2 I' + V I'').
    moves = -(here + v * tilt) / (2.0 * slope + v * bend)
    return (
        fit.estimate(i, here + slope * moves),
        fit.estimate(v, moves),
        fit.estimate(v * i, v * here),
    )


def _top(fit: _Fit) -> float:
    """The voltage of the largest V I(V) inside the window."""
    power = np.polynomial.Polynomial(fit.terms) * np.polynomial.Polynomial([fit.centre, fit.scale])
    roots = power.deriv().roots()
    inside = roots.real[(np.abs(roots.imag) < 1e-9) & (np.abs(roots.real) < 1.0)]
    places = np.concatenate((inside, [-1.0, 1.0]))
    best = float(places[np.argmax(power(places))])
    if not -1.0 < best < 1.0:
        raise NoFigures("the maximum power lies at the edge of its window: knots are too scattered")
    return fit.centre + fit.scale * best


def _open_circuit(knots: _Knots, isc: float) -> _Estimate:
    """Voc by a parabola V(I) through the last knots, for want of a static measurement."""
    small = np.flatnonzero(np.abs(knots.current) < _END_CURRENT * isc)
    stop = int(small[-1]) + 1 if small.size else 0
    if stop < 4:
        raise NoFigures(
            f"the curve ends at {knots.current[-1]:.4g} A, {knots.current[-1] / isc:.0%} of Isc: "
            "too early to extrapolate Voc"
        )
    # Three knots make a parabola, a fourth averages; they may reach further up the curve.
    fit = _Fit.of(knots, slice(max(0, min(int(small[0]), stop - 4)), stop), 2, swapped=True)
    return fit.estimate(fit.at(0.0), fit.powers(0.0))
