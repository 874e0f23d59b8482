"""Charges pair by pair, for what a knot loses, where it is placed, and what the host puts back.

Comes in: a source and a board's scales. Goes out: the codes of every pair as the converters
give them, knots made of them, and the source's true figures. All sources are invented. What
the firmware makes of the codes is in `placing.py`.

A capacitor behind `SERIES_OHM` charges: dt = C (dv - R di) / i. The sources are single diodes
of which the junction voltage is given and current and voltage follow; substrings in series
each have a bypass diode, and are added at equal currents.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache

import numpy as np
import numpy.typing as npt

from kneewise.curve.figures import Figures, extract
from kneewise.instrument.convert import Converted, convert
from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import RawKnots, Reading

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

PAIR_NS = 4000
SKEW_NS = 2000
SERIES_OHM = 0.07
CONDUCTING_US = 7_000_000


def scales(
    *,
    volts: float = 0.0165,
    amperes: float = 0.0052,
    volts_zero: float = 24.0,
    wide: float = 1.0,
    code_max: int = 4095,
    divider_ohm: float = 1e12,
) -> Scales:
    """The reference board's, its divider left out unless asked for."""
    return Scales(
        voltage_v_per_code=volts,
        voltage_zero_code=volts_zero,
        current_a_per_code=amperes,
        current_zero_code=40.0,
        capacitor_v_per_code=volts,
        capacitor_zero_code=24.0,
        voltage_delay_s=0.0,
        current_delay_s=0.0,
        divider_ohm=divider_ohm,
        lead_ohm=0.0,
        capacitance_f=2200e-6,
        safe_v=12.0,
        code_max=code_max,
        wide_code_lsb=wide,
    )


@dataclass(frozen=True)
class Charge:
    """A path of a source's static curve, fine in time: shape (n,), s, V and A."""

    time: Floats
    voltage: Floats
    current: Floats
    volts: float
    """Of one code, on the board that suits this source."""
    amperes: float

    @property
    def truth(self) -> dict[str, float]:
        """pmp, vmp and voc, by parabolas and straight lines through the finest points."""
        power = self.voltage * self.current
        top = int(power.argmax())
        near = slice(top - 1, top + 2)
        a, b, c = np.polyfit(self.voltage[near] - self.voltage[top], power[near], 2)
        return {
            "pmp": float(c - b * b / (4.0 * a)),
            "vmp": float(self.voltage[top] - b / (2.0 * a)),
            "voc": self.voc,
        }

    @property
    def voc(self) -> float:
        v, i = self.voltage[-2:], self.current[-2:]
        return float(v[1] - i[1] * (v[1] - v[0]) / (i[1] - i[0]))

    @property
    def isc(self) -> float:
        """Along the straight beginning, carried on to 0 V."""
        near = int(np.searchsorted(self.voltage, self.voltage[0] + 0.04 * self.voc))
        v, i = self.voltage[[0, near]], self.current[[0, near]]
        return float(i[0] - v[0] * (i[1] - i[0]) / (v[1] - v[0]))

    def at(self, seconds: Floats) -> tuple[Floats, Floats]:
        return np.interp(seconds, self.time, self.voltage), np.interp(
            seconds, self.time, self.current
        )

    @property
    def end_s(self) -> float:
        """When the current has died to 0.1 %: some slices after 0.2 %, as sweeps end."""
        return float(np.interp(-1e-3 * self.current[0], -self.current, self.time))

    def pairs(self, end: float = 0.997) -> int:
        """Pairs until `end` of the open voltage."""
        last = np.interp(end * self.voc, self.voltage, self.time)
        return int(last / (1e-9 * PAIR_NS))


def _substring(
    photo: float, saturation: float, thermal: float, series: float, shunt: float
) -> tuple[Floats, Floats]:
    """Voltage and current (falling) of a substring with its bypass diode."""
    top = thermal * np.log(photo / saturation + 1.0)
    junction = np.linspace(-1.5 - photo * series, top * 1.001, 400_000)
    own = photo - saturation * np.expm1(junction / thermal) - junction / shunt
    voltage = junction - own * series
    current = own + 1e-9 * np.expm1(np.minimum(-voltage, 1.2) / 0.026)
    return voltage, current


def charge(
    parts: Sequence[tuple[float, float, float, float, float]],
    *,
    farads: float = 2200e-6,
    volts: float = 0.0165,
    amperes: float = 0.0052,
) -> Charge:
    """The charge of substrings in series."""
    curves = [_substring(*part) for part in parts]
    largest = max(part[0] for part in parts)
    # Fine where anything bends: all the substrings' own currents, put in order.
    every = np.concatenate([current[(current > 0) & (current < largest)] for _, current in curves])
    amps = np.unique(np.append(every[::3], [1e-4 * largest, 5e-5 * largest]))[::-1]
    voltage = sum(np.interp(-amps, -current, voltage) for voltage, current in curves)
    keep = voltage - amps * SERIES_OHM > 0.0
    voltage, amps = np.asarray(voltage)[keep], amps[keep]
    time = pace(voltage, amps, farads, SERIES_OHM)
    return Charge(time, voltage, amps, volts, amperes)


def pace(voltage: Floats, current: Floats, farads: float, series_ohm: float = 0.0) -> Floats:
    """Seconds from the first point of a path to each, by the mean current of every step."""
    steps = np.diff(voltage) - series_ohm * np.diff(current)
    mean = 0.5 * (current[1:] + current[:-1])
    return np.concatenate(([0.0], np.cumsum(farads * steps / mean)))


def _third(level: float) -> tuple[float, float, float, float, float]:
    return (9.2 * level, 2e-10, 0.54, 0.117, 117.0)


@cache
def source(name: str) -> Charge:
    """One of SOURCES."""
    match name:
        case "one knee":
            return charge([(9.2, 2e-10, 1.62, 0.22, 350.0)])
        case "low fill factor":
            return charge([(9.2, 2e-10, 1.62, 1.37, 60.0)])
        case "two steps":
            return charge([_third(1.0), _third(1.0), _third(0.5)])
        case "three steps":
            return charge([_third(1.0), _third(0.75), _third(0.4)])
        case "100 W/m2":
            return charge([(0.92, 2e-10, 1.62, 0.35, 350.0)])
        case "mini-module":
            return charge([(5.0, 1.2e-10, 0.324, 0.05, 60.0)])
        case "string":
            made = (9.2, 2e-10, 1.62 * 24, 0.35 * 24, 350.0 * 24)
            return charge([made], farads=100e-6, volts=0.27)
    raise KeyError(name)


SOURCES = (
    "one knee",
    "low fill factor",
    "two steps",
    "three steps",
    "100 W/m2",
    "mini-module",
    "string",
)


@dataclass(frozen=True)
class Codes:
    """Codes of every pair, shape (n,), whole numbers unless `exact`."""

    voltage: Floats
    current: Floats

    def knots(self, counts: Ints, bin_pairs: int = 1) -> RawKnots:
        """Sums over consecutive runs of `counts` pairs, each of whole bins but for the last."""
        starts = np.concatenate(([0], np.cumsum(counts)))
        middle = PAIR_NS // 1000 * starts[:-1] + PAIR_NS // 1000 * (counts - 1) // 2
        v, i, vs, cs = (
            np.add.reduceat(column[: starts[-1]], starts[:-1])
            for column in (
                self.voltage,
                self.current,
                _second_differences(self.voltage, bin_pairs),
                _second_differences(self.current, bin_pairs),
            )
        )
        return RawKnots(
            *(
                np.asarray(np.rint(column), dtype=np.uint64)
                for column in (CONDUCTING_US + middle, v, i, counts, vs, cs)
            )
        )


def _second_differences(codes: Floats, bin_pairs: int) -> Floats:
    """Squared, of the sums of successive full bins: each at its bin's first pair, else zero."""
    bins = codes[: len(codes) // bin_pairs * bin_pairs].reshape(-1, bin_pairs).sum(axis=1)
    terms = np.zeros(len(codes))
    terms[2 * bin_pairs : bin_pairs * len(bins) : bin_pairs] = np.diff(bins, 2) ** 2
    return terms


def widths(wide: Sequence[float] | Floats, codes: int = 4096) -> Floats:
    """Upper edges of all codes but the last, in ideal LSB from the first code's lower edge."""
    each = np.full(codes, (codes - sum(wide)) / (codes - len(wide)))
    if len(wide):
        each[[511, 1535, 2559, 3583]] = wide
    edges: Floats = np.cumsum(each)[:-1]
    return edges


def codes_of(
    made: Charge,
    *,
    seed: int | None = 0,
    noise: float = 1.2,
    wide: Sequence[float] | Floats = (),
    skew_ns: int = 0,
    first_ns: int = 0,
    end: float = 0.997,
    count: int | None = None,
) -> Codes:
    """Every pair of one charge, with Gaussian noise of `noise` codes on each conversion."""
    count = made.pairs(end) if count is None else count
    at: Floats = 1e-9 * (first_ns + PAIR_NS * np.arange(count, dtype=np.float64))
    voltage = made.at(at)[0] / made.volts + 24.0
    current = made.at(at + 1e-9 * skew_ns)[1] / made.amperes + 40.0
    rng = np.random.default_rng(seed)
    voltage = voltage + noise * rng.standard_normal(count)
    current = current + noise * rng.standard_normal(count)
    return Codes(quantized(voltage, wide), quantized(current, wide))


def quantized(exact: Floats, wide: Sequence[float] | Floats = ()) -> Floats:
    """Codes of inputs in ideal codes."""
    if len(wide) == 0:
        return np.clip(np.floor(exact + 0.5), 0.0, 4095.0)
    return np.searchsorted(widths(wide), exact + 0.5, side="right").astype(np.float64)


def partition(made: Charge, knots: int, *, count: int | None = None, evenness: float = 0.2) -> Ints:
    """Pairs of each knot: by length in the plane and by the root of the bend, as the firmware.

    Each knot has at least one pair.
    """
    count = made.pairs() if count is None else count
    at = np.linspace(0.0, 1e-9 * PAIR_NS * count, 4001)
    v, i = made.at(at)
    x, y = v / v[-1], i / i.max()
    along = np.concatenate(([0.0], np.cumsum(np.hypot(np.diff(x), np.diff(y)))))
    even = np.linspace(0.0, along[-1], 121)
    px, py = np.interp(even, along, x), np.interp(even, along, y)
    turn = np.abs(np.diff(np.unwrap(np.arctan2(np.diff(py), np.diff(px)))))
    bend = np.zeros(121)
    bend[1:-1] = np.sqrt(turn)
    bend[1:-1] = (bend[:-2] + 2.0 * bend[1:-1] + bend[2:]) / 4.0
    density = (1.0 - evenness) * bend / bend.mean() + evenness
    share = np.concatenate(([0.0], np.cumsum(density[1:] + density[:-1])))
    places = np.interp(np.linspace(0.0, share[-1], knots + 1), share, even)
    borders = np.rint(np.interp(places, along, at) / at[-1] * count).astype(np.int64)
    borders[0], borders[-1] = 0, count
    for number in range(1, knots + 1):
        borders[number] = max(borders[number], borders[number - 1] + 1)
    borders = np.minimum(borders, count - knots + np.arange(knots + 1))
    counts: Ints = np.diff(borders)
    return counts


def convert_sweep(
    made: Charge,
    codes: Codes,
    counts: Ints,
    *,
    board: Scales | None = None,
    skew_ns: int = 0,
    zero_code: float = 40.0,
    open_code: float | None = None,
    bin_pairs: int = 1,
) -> Converted:
    """What the host makes of the knots; readings before closing without noise."""
    raw = codes.knots(counts, bin_pairs)
    return convert_raw(
        made,
        raw,
        bin_pairs,
        board=board,
        skew_ns=skew_ns,
        zero_code=zero_code,
        open_code=open_code,
    )


def convert_raw(
    made: Charge,
    raw: RawKnots,
    bin_pairs: int,
    *,
    board: Scales | None = None,
    skew_ns: int = 0,
    zero_code: float = 40.0,
    open_code: float | None = None,
) -> Converted:
    open_code = made.voc / made.volts + 24.0 if open_code is None else open_code
    return convert(
        raw,
        board or scales(volts=made.volts, amperes=made.amperes),
        static_voltage=Reading(round(open_code * 4096), 4096),
        zero_current=Reading(round(zero_code * 4096), 4096),
        pair_ns=PAIR_NS,
        skew_ns=skew_ns,
        bin_pairs=bin_pairs,
    )


def figures_of(points: Converted) -> Figures:
    return extract(
        points.voltage,
        points.current,
        weight=points.weight,
        voltage_sigma=points.voltage_sigma,
        current_sigma=points.current_sigma,
        voc_static=points.voc_static,
    )
