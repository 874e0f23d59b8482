"""Codes of a charge along a given curve, by numpy: what the converters would have made of it."""

from __future__ import annotations

import numpy as np

V_PER_CODE, V_ZERO = 0.0165, 24
A_PER_CODE, A_ZERO = 0.0052, 40
PAIR_S = 4e-6


def module_curve(
    photo_a: float = 9.2, *, saturation_a: float = 2e-10, a_volt: float = 1.62, points: int = 4000
) -> tuple[np.ndarray, np.ndarray]:
    """A single-diode module (V, A), from 0 V to its open voltage."""
    series_ohm, shunt_ohm = 0.35, 350.0
    last = a_volt * np.log(photo_a / saturation_a + 1)
    inner = np.linspace(0.0, last, points)
    current = photo_a - saturation_a * np.expm1(inner / a_volt) - inner / shunt_ohm
    volt = inner - current * series_ohm
    keep = (volt >= 0) & (current > 0)
    return volt[keep], current[keep]


def stepped_curve() -> tuple[np.ndarray, np.ndarray]:
    """Three substrings in series, one of them shaded to 45 %, each behind a bypass diode."""
    volt, current = module_curve()
    shaded_v, shaded_a = module_curve(0.45 * 9.2)
    amperes = np.linspace(0.01, current.max() * 0.999, 6000)
    bright = np.interp(amperes, current[::-1], volt[::-1]) * 2 / 3
    dim = np.interp(amperes, shaded_a[::-1], shaded_v[::-1]) / 3
    dim = np.where(amperes > shaded_a.max(), -0.45, dim)
    total = (bright + dim)[::-1]
    keep = total >= 0
    return total[keep], amperes[::-1][keep]


def charge(
    curve: tuple[np.ndarray, np.ndarray],
    *,
    capacitance_f: float = 2200e-6,
    until: float = 0.999,
    noise: float = 1.0,
    seed: int = 1,
) -> np.ndarray:
    """Pairs of codes of one charge, up to `until` of the last voltage: dt = C dv / i."""
    volt, current = curve
    mean = 0.5 * (current[1:] + current[:-1])
    time_s = np.concatenate([[0.0], np.cumsum(capacitance_f * np.diff(volt) / mean)])
    end_s = np.interp(until * volt[-1], volt, time_s)
    at = np.arange(0.0, end_s, PAIR_S)
    draw = np.random.default_rng(seed)
    v = np.interp(at, time_s, volt) / V_PER_CODE + V_ZERO
    i = np.interp(at, time_s, current) / A_PER_CODE + A_ZERO
    pairs = np.stack([v, i], axis=1) + noise * draw.standard_normal((len(at), 2))
    return np.clip(np.rint(pairs), 0, 4095).astype(np.int64)


def in_plane(curve: tuple[np.ndarray, np.ndarray]) -> np.ndarray:
    """The curve's points in the plane (V / last V, I / largest I)."""
    volt, current = curve
    return np.stack([volt / volt[-1], current / current.max()], axis=1)


def misfit(curve: tuple[np.ndarray, np.ndarray], points: np.ndarray) -> float:
    """Largest distance in the plane from the curve to the straight lines between `points`."""
    plane = in_plane(curve)
    plane = plane[(plane[:, 0] >= points[0, 0]) & (plane[:, 0] <= points[-1, 0])]
    start, step = points[:-1], np.diff(points, axis=0)
    best = np.full(len(plane), np.inf)
    for origin, along in zip(start, step, strict=True):
        share = np.clip((plane - origin) @ along / (along @ along), 0.0, 1.0)
        foot = origin + share[:, None] * along
        best = np.minimum(best, np.hypot(*(plane - foot).T))
    return float(best.max())
