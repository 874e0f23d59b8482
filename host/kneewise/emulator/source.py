"""The photovoltaic source of the emulated device: one diode, and its true figures.

Comes in: the five numbers of the single-diode model. Goes out: the static curve, solved to
the last digits of a double, and `truth()`, against which figures drawn from an emulated
sweep are held. Capacitors, contacts and time do not belong here; `plant.py` has them.

The model, in the diode voltage u (V), with a = n Ns Vt (V):

    i(u) = Iph - I0 (exp(u / a) - 1) - u / Rsh        v(u) = u - i(u) Rs

Source: the single-diode equation as `pvlib.pvsystem.singlediode` documents it; taking u as
the free variable follows Bishop, Solar Cells 25 (1988) 73-89. It makes current and voltage
explicit, so that only their inverses have to be solved for.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]

_ITERATIONS = 100  # Newton needs about ten; the bound only keeps a mistake from hanging


def solve_diode(total: npt.ArrayLike, exponential: float, linear: float, a: float) -> Floats:
    """The u with `exponential * exp(u / a) + linear * u = total`, elementwise.

    Every inverse of the single-diode model has this form. The left side is convex and rises,
    so Newton's method started at or above the root comes down to it without overshoot, and
    no exponential taken on the way can overflow.

    Raises ValueError where there is no root: `linear` is 0 and `total` is not above 0.
    """
    right = np.asarray(total, dtype=np.float64)
    if exponential == 0.0:
        return np.asarray(right / linear)
    if linear == 0.0 and bool(np.any(right <= 0.0)):
        raise ValueError("no diode voltage gives this current: the shunt resistance is infinite")
    # Two upper bounds: drop the linear term (u >= 0 only), or drop the exponential.
    # Logarithms are subtracted, since a tiny factor would overflow a quotient or a product.
    offset = math.log(exponential)
    u = np.asarray(a * (np.log(np.maximum(right, exponential)) - offset))
    if linear > 0.0:
        u = np.minimum(u, right / linear)
    for _ in range(_ITERATIONS):
        term = np.exp(u / a + offset)
        lower = np.minimum(u, u - (term + linear * u - right) / (term / a + linear))
        if np.array_equal(lower, u):
            break
        u = lower
    return u


@dataclass(frozen=True, slots=True, kw_only=True)
class Source:
    """A single-diode source; photocurrent and saturation current in A, `n_ns_vt_v` in V.

    `shunt_resistance_ohm` may be infinite. Methods take and return numpy arrays of any shape
    (or scalars), volts and amperes.
    """

    photocurrent_a: float
    saturation_current_a: float
    n_ns_vt_v: float
    series_resistance_ohm: float
    shunt_resistance_ohm: float

    def current(self, u: npt.ArrayLike) -> Floats:
        """Terminal current at diode voltage `u`."""
        u = np.asarray(u, dtype=np.float64)
        diode = self.saturation_current_a * np.expm1(u / self.n_ns_vt_v)
        return np.asarray(self.photocurrent_a - diode - u / self.shunt_resistance_ohm)

    def voltage(self, u: npt.ArrayLike) -> Floats:
        """Terminal voltage at diode voltage `u`."""
        u = np.asarray(u, dtype=np.float64)
        return np.asarray(u - self.series_resistance_ohm * self.current(u))

    def slope(self, u: npt.ArrayLike) -> Floats:
        """di/du (S), never above 0."""
        u = np.asarray(u, dtype=np.float64)
        diode = self.saturation_current_a / self.n_ns_vt_v * np.exp(u / self.n_ns_vt_v)
        return np.asarray(-diode - 1.0 / self.shunt_resistance_ohm)

    def diode_voltage_at(self, voltage: npt.ArrayLike) -> Floats:
        """u at a terminal voltage."""
        generated = self.photocurrent_a + self.saturation_current_a
        rs = self.series_resistance_ohm
        return solve_diode(
            np.asarray(voltage, dtype=np.float64) + rs * generated,
            rs * self.saturation_current_a,
            1.0 + rs / self.shunt_resistance_ohm,
            self.n_ns_vt_v,
        )

    def current_at(self, voltage: npt.ArrayLike) -> Floats:
        """Terminal current at a terminal voltage, to about 1e-13 of the photocurrent."""
        return self.current(self.diode_voltage_at(voltage))

    def voltage_at(self, current: npt.ArrayLike) -> Floats:
        """Terminal voltage at a terminal current.

        Raises ValueError where the shunt is infinite and the current above the photocurrent.
        """
        current = np.asarray(current, dtype=np.float64)
        u = solve_diode(
            self.photocurrent_a + self.saturation_current_a - current,
            self.saturation_current_a,
            1.0 / self.shunt_resistance_ohm,
            self.n_ns_vt_v,
        )
        return np.asarray(u - self.series_resistance_ohm * current)

    def truth(self) -> dict[str, float]:
        """isc, voc, imp, vmp, pmp, ff of the bare terminals (A, V, W, 1), good to 1e-9.

        The maximum is the sign change of dp/du = v' i + v i'. Between Isc and Voc there is
        exactly one, since i(v) is concave. A dark source has no figures: all are 0.
        """
        if self.photocurrent_a <= 0.0:
            return dict.fromkeys(("isc", "voc", "imp", "vmp", "pmp", "ff"), 0.0)
        isc, voc = float(self.current_at(0.0)), float(self.voltage_at(0.0))
        low, high = self.series_resistance_ohm * isc, voc
        while low < (middle := 0.5 * (low + high)) < high:
            if self._power_slope(middle) > 0.0:
                low = middle
            else:
                high = middle
        imp, vmp = float(self.current(low)), float(self.voltage(low))
        pmp = imp * vmp
        return {
            "isc": isc,
            "voc": voc,
            "imp": imp,
            "vmp": vmp,
            "pmp": pmp,
            "ff": pmp / (isc * voc),
        }

    def _power_slope(self, u: float) -> float:
        """dp/du in plain floats, since the bisection calls it sixty times."""
        a, rs = self.n_ns_vt_v, self.series_resistance_ohm
        diode = self.saturation_current_a * math.expm1(u / a)
        current = self.photocurrent_a - diode - u / self.shunt_resistance_ohm
        slope = -(diode + self.saturation_current_a) / a - 1.0 / self.shunt_resistance_ohm
        return (1.0 - rs * slope) * current + (u - rs * current) * slope

    def curve(self, points: int) -> tuple[Floats, Floats]:
        """`points` exact points from Isc to Voc: (voltage, current), shape (points,) each.

        They stand evenly along the curve in the (V/Voc, I/Isc) plane, so that a plot is
        smooth at the knee without thousands of points.
        """
        if points < 2:
            raise ValueError(f"a curve has at least 2 points, not {points}")
        voc, isc = float(self.voltage_at(0.0)), float(self.current_at(0.0))
        u = np.linspace(self.series_resistance_ohm * isc, voc, max(2000, 4 * points))
        if voc > 0.0:
            steps = np.hypot(np.diff(self.voltage(u)) / voc, np.diff(self.current(u)) / isc)
            along = np.concatenate(([0.0], np.cumsum(steps)))
            u = np.interp(np.linspace(0.0, along[-1], points), along, u)
        else:
            u = np.zeros(points)
        return self.voltage(u), self.current(u)
