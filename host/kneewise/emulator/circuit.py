"""The circuit between two events: what stays as it is, solved from its own start.

Comes in: a `Source`, a `Circuit`, the capacitor's voltage when the stretch began. Goes out:
source voltage, loop current and bank voltage at any time since. What moves the contacts does
not belong here; `plant.py` has it.

Upstream to downstream:

    source --+-- lead + contact + switch + shunt --+--------------+-----------+
             |                                     |              |           |
          divider (its current                  ESR + C     permanent     bleed through
          does not pass the shunt)                           bleeder      its own contact

- Contact open: the source rests at Voc (with the divider as its load) and the capacitor
  falls by one exponential, t = R C ln(V0/V).
- Contact closed: everything is a function of the diode voltage u of the source, of the form
  x0 + x1 exp(u/a) + x2 u. One autonomous equation remains, C dv_c/du du/dt = i_c(u), taken
  with fourth-order Runge-Kutta and read between steps by cubic Hermite. Steps follow the
  curve's own pace (about 20 us on a 9 A module with 2.2 mF) and end in one exponential when
  what is left to equilibrium is small enough to be linear.
"""

from __future__ import annotations

import math
from bisect import bisect_right
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from kneewise.emulator.source import Floats, Source, solve_diode

SHORTED = 1e-3  # of a bleed resistor's value, once it has shorted
STEP = 0.1  # step times the fastest rate; leaves about 1e-7 of the thermal voltage
TAIL = 1e-5  # distance to equilibrium, in thermal voltages, from which it is linear (1e-10 left)


@dataclass(frozen=True, slots=True, kw_only=True)
class Circuit:
    """The numbers of everything but the source. Contact times are plant constants for now."""

    capacitance_f: float
    capacitor_esr_ohm: float = 0.0
    bleed_ohm: float = 100.0
    permanent_bleeder_ohm: float = math.inf
    lead_resistance_ohm: float = 0.0
    contact_resistance_ohm: float = 0.0
    switch_ohm: float = 0.02
    shunt_ohm: float = 0.005
    divider_ohm: float = 1e6
    capacitor_start_v: float = 0.0
    relay_operate_us: int = 8000
    relay_release_us: int = 5000
    switch_open_us: int = 50
    """From the last edge of the make-and-break wave until the switch blocks."""
    bleed_operate_us: int = 5000
    bleed_release_us: int = 5000
    leads_reversed: bool = False
    bare_relay: bool = False
    """No series switch: the make-and-break wave drives the relay's coil, and the stop loop
    carries no drive current."""
    bounce_us: int = 0
    """How long the contact of a bare relay opens and closes again after it first makes."""
    bounce_seed: int = 0
    contact_welded: bool = False
    """Relay and switch both conduct, whatever is commanded."""
    relay_welded: bool = False
    switch_shorted: bool = False
    bleed_open: bool = False
    """The bleed contact moves but its resistor is not in circuit."""
    bleed_shorted: bool = False
    """What is left of the bleed resistor is SHORTED of its value."""

    @property
    def line_ohm(self) -> float:
        """From the source's terminals to the bank's."""
        return (
            self.lead_resistance_ohm
            + self.contact_resistance_ohm
            + (0.0 if self.bare_relay else self.switch_ohm)
            + self.shunt_ohm
        )

    def bleed_siemens(self, bleed_closed: bool) -> float:
        """Conductance of the bleed resistor, where it is in circuit."""
        if not bleed_closed or self.bleed_open:
            return 0.0
        return 1.0 / (self.bleed_ohm * (SHORTED if self.bleed_shorted else 1.0))

    def leak_siemens(self, bleed_closed: bool) -> float:
        """Conductance across the bank's terminals."""
        return 1.0 / self.permanent_bleeder_ohm + self.bleed_siemens(bleed_closed)


class Stretch(Protocol):
    """The circuit between two events; times in seconds since the stretch began."""

    start_us: int

    def values(self, times: Floats) -> tuple[Floats, Floats, Floats]:
        """Source voltage, loop current, bank voltage at ascending times."""

    def capacitor_v(self, time: float) -> float:
        """Voltage on the ideal capacitor, without its ESR: the state that outlives the stretch."""

    def bleed_j(self, time: float) -> float:
        """Energy that the bleed resistor has taken since the stretch began."""


class OpenStretch:
    """Contact open: the source at rest, the capacitor on its bleeders."""

    def __init__(self, circuit: Circuit, bled: bool, open_v: float, start_us: int, v0: float):
        self.start_us = start_us
        leak = circuit.leak_siemens(bled)
        self._bleed = circuit.bleed_siemens(bled)
        self._open_v = open_v
        self._v0 = v0
        share = 1.0 + circuit.capacitor_esr_ohm * leak
        self._rate = leak / (circuit.capacitance_f * share)
        self._share = share

    def values(self, times: Floats) -> tuple[Floats, Floats, Floats]:
        bank = self._v0 / self._share * np.exp(-self._rate * times)
        return np.full_like(times, self._open_v), np.zeros_like(times), bank

    def capacitor_v(self, time: float) -> float:
        return self._v0 * math.exp(-self._rate * time)

    def bleed_j(self, time: float) -> float:
        """Integral of v^2 G over one exponential."""
        if not self._bleed:
            return 0.0
        spent = -math.expm1(-2.0 * self._rate * time) / (2.0 * self._rate)
        return self._bleed * (self._v0 / self._share) ** 2 * spent


class ClosedStretch:
    """Contact closed: one equation in the diode voltage, integrated as far as was asked."""

    def __init__(self, source: Source, circuit: Circuit, bled: bool, start_us: int, v0: float):
        self.start_us = start_us
        leak = circuit.leak_siemens(bled)
        self._bleed = circuit.bleed_siemens(bled)
        self._a = source.n_ns_vt_v
        self._esr = circuit.capacitor_esr_ohm
        rs, i0 = source.series_resistance_ohm, source.saturation_current_a
        shunt = 1.0 / source.shunt_resistance_ohm
        divider = 1.0 / circuit.divider_ohm
        generated = source.photocurrent_a + i0
        # Each triple (x0, x1, x2) stands for x0 + x1 exp(u/a) + x2 u.
        self._terminal = terminal = (-rs * generated, rs * i0, 1.0 + rs * shunt)
        part = 1.0 + rs * divider  # the rest of the source's current goes through the divider
        self._loop = loop = (part * generated, -part * i0, -(part * shunt + divider))
        # ESR and the leaks across the bank: v_bank = (v_c + ESR i_loop) / share.
        self._share = share = 1.0 + self._esr * leak
        series = circuit.line_ohm + self._esr / share
        self._capacitor = tuple(
            share * (v - series * i) for v, i in zip(terminal, loop, strict=True)
        )
        self._charge = tuple(
            (i - leak * v) / share for i, v in zip(loop, self._capacitor, strict=True)
        )
        self._farad = circuit.capacitance_f
        self._times = [0.0]
        self._u = [self._solve(self._capacitor, v0)]
        self._slopes: list[float] = []
        self._tail: tuple[float, float] | None = None  # equilibrium (V), rate (1/s)
        self._judge()

    def _solve(self, triple: tuple[float, ...], value: float) -> float:
        """u where a rising triple has this value."""
        return float(solve_diode(value - triple[0], triple[1], triple[2], self._a))

    def _judge(self) -> None:
        """Note du/dt at the newest node; from near equilibrium on, the tail takes over."""
        u, n, c = self._u[-1], self._charge, self._capacitor
        term = math.exp(u / self._a)
        current = n[0] + n[1] * term + n[2] * u
        fall = -(n[1] * term / self._a + n[2])  # -d(i_c)/du, always above 0
        volume = self._farad * (c[1] * term / self._a + c[2])
        self._slopes.append(current / volume)
        if abs(current) < TAIL * self._a * fall:
            rest = self._solve((-n[0], -n[1], -n[2]), 0.0)
            self._tail = (rest, fall / volume)

    def _step(self, u: float, k1: float, h: float) -> float:
        """One Runge-Kutta step of `h` seconds from `u`, where du/dt is `k1`."""
        n0, n1, n2 = self._charge
        _, c1, c2 = self._capacitor
        a, exp = self._a, math.exp
        v1, v2 = self._farad * c1 / a, self._farad * c2
        x = u + 0.5 * h * k1
        e = exp(x / a)
        k2 = (n0 + n1 * e + n2 * x) / (v1 * e + v2)
        x = u + 0.5 * h * k2
        e = exp(x / a)
        k3 = (n0 + n1 * e + n2 * x) / (v1 * e + v2)
        x = u + h * k3
        e = exp(x / a)
        k4 = (n0 + n1 * e + n2 * x) / (v1 * e + v2)
        return u + h / 6.0 * (k1 + 2.0 * (k2 + k3) + k4)

    def _reach(self, time: float) -> None:
        """Add whole steps until they cover `time`; their places depend on the circuit alone."""
        n, c, a = self._charge, self._capacitor, self._a
        while self._tail is None and self._times[-1] <= time:
            u, slope = self._u[-1], self._slopes[-1]
            term = math.exp(u / a)
            fall = -(n[1] * term / a + n[2]) / (self._farad * (c[1] * term / a + c[2]))
            h = STEP / (2.0 * abs(slope) / a + fall)
            self._times.append(self._times[-1] + h)
            self._u.append(self._step(u, slope, h))
            self._judge()

    def diode_voltages(self, times: Floats) -> Floats:
        """u at ascending times."""
        self._reach(float(times[-1]))
        cut = len(times)
        if self._tail is not None:
            cut = int(np.searchsorted(times, self._times[-1]))
        u = np.empty_like(times)
        if cut:
            first = bisect_right(self._times, float(times[0])) - 1
            last = bisect_right(self._times, float(times[cut - 1])) + 1
            t = np.array(self._times[first:last])
            y = np.array(self._u[first:last])
            f = np.array(self._slopes[first:last])
            at = np.searchsorted(t, times[:cut], side="right") - 1
            at = np.minimum(at, len(t) - 2)
            h = t[at + 1] - t[at]
            s = (times[:cut] - t[at]) / h
            left, right = y[at], y[at + 1]
            rise = right - left
            # Cubic Hermite, written around the chord so that little is lost to rounding.
            p, q = h * f[at] - rise, rise - h * f[at + 1]
            u[:cut] = left + s * rise + s * (1.0 - s) * ((1.0 - s) * p + s * q)
        if cut < len(times) and self._tail is not None:
            rest, rate = self._tail
            away = self._u[-1] - rest
            u[cut:] = rest + away * np.exp(-rate * (times[cut:] - self._times[-1]))
        return u

    def values(self, times: Floats) -> tuple[Floats, Floats, Floats]:
        u = self.diode_voltages(times)
        term = np.exp(u / self._a)
        v, i, c = (
            x[0] + x[1] * term + x[2] * u for x in (self._terminal, self._loop, self._capacitor)
        )
        return v, i, (c + self._esr * i) / self._share

    def capacitor_v(self, time: float) -> float:
        self._reach(time)
        if self._tail is not None and time >= self._times[-1]:
            u = float(self.diode_voltages(np.array([time]))[0])
        else:
            # A partial step rather than the interpolation: an event keeps full accuracy.
            at = bisect_right(self._times, time) - 1
            u = self._step(self._u[at], self._slopes[at], time - self._times[at])
        c = self._capacitor
        return c[0] + c[1] * math.exp(u / self._a) + c[2] * u

    def bleed_j(self, time: float) -> float:
        """Integral of v^2 G by Simpson's rule over each step; from the tail on, v stands still."""
        if not self._bleed:
            return 0.0
        self._reach(time)
        ends = np.array([*(t for t in self._times if t < time), time])
        middles = 0.5 * (ends[1:] + ends[:-1])
        power = self._bleed * self.values(np.sort(np.concatenate((ends, middles))))[2] ** 2
        parts = power[:-1:2] + 4.0 * power[1::2] + power[2::2]
        return float(np.sum(np.diff(ends) * parts)) / 6.0
