"""Synthetic curves, knots and traces for the tests of figures, plots and archive.

Knots come about as in the tracer: a source charges a capacitor, so pairs come at an even pace
in time and dv/dt = i / C; the knots part the path where it bends, and each is the mean of its
pairs, from which the host's own unbending makes a point. The sources are invented,
single-diode ones by `pvlib.singlediode`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache
from typing import Any

import numpy as np
import numpy.typing as npt
import pvlib  # type: ignore[import-untyped]

from kneewise.curve.unbend import Cells, unbend
from kneewise.instrument.trace import Check, Integrity, RawKnots, Reading, Trace

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Source:
    """A single-diode source, currents in A; `thermal_v` is n Ns Vt."""

    photocurrent: float
    saturation: float
    series_ohm: float
    shunt_ohm: float
    thermal_v: float

    @classmethod
    def random(cls, rng: np.random.Generator) -> Source:
        """One of 15 to 60 V, 0.5 to 15 A, with a fill factor of about 0.4 to 0.85."""
        voc, isc = rng.uniform(15.0, 60.0), 10.0 ** rng.uniform(-0.3, 1.17)
        thermal = voc / rng.uniform(15.0, 32.0)
        return cls(
            photocurrent=isc,
            saturation=isc / np.expm1(voc / thermal),
            series_ohm=voc / isc * rng.uniform(0.002, 0.22),
            shunt_ohm=voc / isc * 10.0 ** rng.uniform(0.8, 3.0),
            thermal_v=thermal,
        )

    def truth(self) -> dict[str, float]:
        return dict(_truth(self))

    def path(self, start_v: float) -> tuple[Floats, Floats]:
        """Voltage and current from `start_v` to near open circuit, finely."""
        truth = self.truth()
        first = start_v + truth["isc"] * self.series_ohm
        # Over the junction voltage the current is explicit.
        junction = first + (truth["voc"] - first) * (1.0 - np.linspace(1.0, 0.0, 4000) ** 2)
        current = (
            self.photocurrent
            - self.saturation * np.expm1(junction / self.thermal_v)
            - junction / self.shunt_ohm
        )
        keep = current > 0.002 * truth["isc"]
        return (junction - current * self.series_ohm)[keep], current[keep]


@cache
def _truth(source: Source) -> dict[str, float]:
    at = pvlib.pvsystem.singlediode(
        source.photocurrent,
        source.saturation,
        source.series_ohm,
        source.shunt_ohm,
        source.thermal_v,
    )
    names = {"isc": "i_sc", "voc": "v_oc", "imp": "i_mp", "vmp": "v_mp", "pmp": "p_mp"}
    truth = {name: float(at[theirs]) for name, theirs in names.items()}
    truth["ff"] = truth["pmp"] / (truth["isc"] * truth["voc"])
    return truth


@dataclass(frozen=True)
class Knots:
    """What `extract` takes."""

    voltage: Floats
    current: Floats
    weight: Floats
    voltage_sigma: Floats
    current_sigma: Floats
    time: Floats

    def arguments(self) -> dict[str, Any]:
        names = ("weight", "voltage_sigma", "current_sigma")
        return {name: getattr(self, name) for name in names}


def sweep(
    voltage: Floats,
    current: Floats,
    knots: int,
    *,
    pairs: int = 4000,
    voltage_noise: float = 0.0,
    current_noise: float = 0.0,
    evenness: float = 0.3,
    seed: int = 0,
) -> Knots:
    """Knots of one charge along a finely given path; noise is one pair's standard deviation.

    `evenness` is the share of knots spread evenly over the path, the rest go by the square
    root of its curvature.
    """
    rng = np.random.default_rng(seed)
    step = 2.0 * np.diff(voltage) / (current[1:] + current[:-1])
    time = np.concatenate(([0.0], np.cumsum(step)))
    at = np.linspace(0.0, time[-1], pairs)
    v = np.interp(at, time, voltage) + rng.normal(0.0, 1.0, pairs) * voltage_noise
    i = np.interp(at, time, current) + rng.normal(0.0, 1.0, pairs) * current_noise
    along_x = np.gradient(voltage / voltage[-1])
    along_y = np.gradient(current / current[0])
    length = np.hypot(along_x, along_y)
    bend = np.sqrt(np.abs(np.gradient(np.unwrap(np.arctan2(along_y, along_x)))) / length) * length
    density = (1.0 - evenness) * bend / bend.sum() + evenness * length / length.sum()
    share = np.concatenate(([0.0], np.cumsum(density[1:])))
    border = np.interp(np.linspace(0.0, 1.0, knots + 1)[1:-1], share / share[-1], time)
    home = np.searchsorted(border, at)
    weight = np.bincount(home, minlength=knots).astype(np.float64)
    used = weight > 0
    weight = weight[used]

    cells = Cells.of(weight)

    def mean(values: Floats) -> Floats:
        sums: Floats = np.bincount(home, values, minlength=knots)[used] / weight
        return sums

    voltages, voltage_sigma = unbend(cells, mean(v), voltage_noise / np.sqrt(weight))
    currents, current_sigma = unbend(cells, mean(i), current_noise / np.sqrt(weight))
    return Knots(
        voltage=voltages,
        current=currents,
        weight=weight,
        voltage_sigma=voltage_sigma,
        current_sigma=current_sigma,
        # The reference module charges 2.2 mF.
        time=mean(at) * 2.2e-3,
    )


def reference_source() -> Source:
    """The module that the project's reference numbers speak of."""
    return Source(9.2, 2e-10, 0.35, 350.0, 1.62)


def make_trace(
    source: Source | None = None,
    *,
    knots: int = 96,
    noise: float = 6e-4,
    seed: int = 0,
    start: float = 0.03,
    **changes: Any,
) -> Trace:
    """A whole trace of `source`; `noise` is relative to Isc and to half of Voc."""
    source = source or reference_source()
    truth = source.truth()
    path = source.path(start * truth["voc"])
    made = sweep(
        *path,
        knots,
        voltage_noise=0.5 * noise * truth["voc"],
        current_noise=noise * truth["isc"],
        seed=seed,
    )
    return trace_of(made, truth, **changes)


def trace_of(made: Knots, truth: dict[str, float] | None, **changes: Any) -> Trace:
    """A trace round these knots; codes are as a 12-bit converter over Voc and Isc gives them."""
    pairs = made.weight.astype(np.uint64)
    top_v, top_i = float(made.voltage.max()), float(made.current.max())
    scatter = (6 * pairs).astype(np.uint64)
    trace = Trace(
        trace_id="5d3c9b1e77aa40f2a1b2c3d4e5f60718",
        rung="in-process",
        emulated=True,
        device={"device_id": "0011223344556677", "firmware": "0.1.0", "boot_nonce": "7f00aa01"},
        profile={"voltage_full_scale_mv": 60000, "bank_uf": 2200, "maker": "Invented Bench Works"},
        started_utc="2031-05-06T10:20:30.250000+00:00",
        started_uncertainty_s=0.002,
        end_reason="current ended",
        raw=RawKnots(
            time_us=(5_000_000 + made.time * 1e6).astype(np.uint64),
            voltage_sum=(made.voltage / top_v * 3500 * made.weight).astype(np.uint64),
            current_sum=(made.current / top_i * 3500 * made.weight).clip(0).astype(np.uint64),
            pairs=pairs,
            voltage_scatter=scatter,
            current_scatter=scatter,
        ),
        static_voltage=Reading(code_sum=3500 * 256, conversions=256),
        zero_current=Reading(code_sum=20 * 256 + 3, conversions=256),
        voltage=made.voltage,
        current=made.current,
        time=made.time,
        weight=made.weight,
        voltage_sigma=made.voltage_sigma,
        current_sigma=made.current_sigma,
        voc_static=truth["voc"] if truth else top_v,
        residual_capacitor_v=0.04,
        integrity=Integrity(
            knots=len(pairs),
            pairs=int(pairs.sum()),
            frames_bad=0,
            blocks_resent=1,
            ring_overruns=0,
            manifest_crc_ok=True,
        ),
        checks=(Check(name="ring overruns", holds=True, found="0", expected="0"),),
        scenario={"name": "clear noon", "place": "Ostrand Flats", "irradiance": [1000.0, 998.5]},
        truth=truth,
    )
    return replace(trace, **changes)
