"""One trace: a sweep as the device measured it, and the same in volts and amperes.

Comes in: raw knots and readings from `sweep.py`, numbers from the board profile. Goes out:
`Trace`, which the archive stores, the report draws and scripts read. No serial port and no
wire format belong here.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from kneewise.curve.figures import Figures, extract

if TYPE_CHECKING:
    from kneewise.instrument.full_rate import FullRatePairs

Floats = npt.NDArray[np.float64]
Counts = npt.NDArray[np.uint64]
Codes = npt.NDArray[np.uint16]


REPLAY = "replay"
"""The rung of what comes from a recording."""


def label_of(emulated: bool, rung: str) -> str:
    """ "EMULATED", "REPLAYED", both, or "" for what a tracer measures now."""
    words = (("EMULATED", emulated), ("REPLAYED", rung == REPLAY))
    return ", ".join(word for word, holds in words if holds)


@dataclass(frozen=True, slots=True)
class RawKnots:
    """Knots as measured, arrays of shape (n,), uint64.

    `time_us`: device microseconds since boot at the middle of the knot's voltage
    conversions. `voltage_sum`, `current_sum`: sums of ADC codes over `pairs` pairs.
    `voltage_scatter`, `current_scatter`: sums of squared differences between successive
    codes, so that scatter / (2 pairs) estimates the variance of one code without the ramp.
    """

    time_us: Counts
    voltage_sum: Counts
    current_sum: Counts
    pairs: Counts
    voltage_scatter: Counts
    current_scatter: Counts

    def __len__(self) -> int:
        return len(self.time_us)


@dataclass(frozen=True, slots=True)
class RawPairs:
    """Raw pairs, kept one by one as measured: codes in arrays of shape (n,), uint16.

    `first`: number of the first of them, counted from the first pair of the first knot.
    """

    first: int
    voltage: Codes
    current: Codes

    def __len__(self) -> int:
        return len(self.voltage)


@dataclass(frozen=True, slots=True)
class Reading:
    """A mean of several conversions: `code_sum` over `conversions`."""

    code_sum: int
    conversions: int

    @property
    def code(self) -> float:
        return self.code_sum / self.conversions


@dataclass(frozen=True, slots=True)
class Check:
    """One thing that was checked: its name, what was found, and whether it held."""

    name: str
    holds: bool
    found: str
    expected: str


@dataclass(frozen=True, slots=True)
class Integrity:
    """How the sweep came over: counts of knots, pairs, and of what went wrong on the way."""

    knots: int
    pairs: int
    frames_bad: int
    blocks_resent: int
    ring_overruns: int
    manifest_crc_ok: bool
    bounces: int = 0
    """Times that the contact opened again after it first conducted; the curve begins behind."""


@dataclass(frozen=True, kw_only=True)
class Trace:
    """One I-V trace.

    `voltage` (V), `current` (A), `time` (s since the contact began to conduct) and `weight`
    (pairs averaged) have shape (n,). They are points of the curve at the knots' middles, not
    means over them: see `kneewise.instrument.convert`. `voltage_sigma` and `current_sigma` are
    their standard deviations from scatter alone.
    """

    trace_id: str
    rung: str
    """What ran the sweep: "tracer", "replay", or an emulator's "micropython" or "in-process"."""
    emulated: bool
    device: dict[str, Any]
    """device_id, firmware, protocol, profile_crc, boot_nonce as text."""
    profile: dict[str, int | str]
    """The board profile as the device holds it (integers, units in the names)."""
    started_utc: str
    """ISO 8601, from the host's clock; see `started_uncertainty_s`."""
    started_uncertainty_s: float
    end_reason: str
    raw: RawKnots
    static_voltage: Reading
    """Source voltage codes just before closing, nothing but the divider drawing current."""
    zero_current: Reading
    """Current codes just before closing, with the contact open."""
    voltage: Floats
    current: Floats
    time: Floats
    weight: Floats
    voltage_sigma: Floats
    current_sigma: Floats
    voc_static: float
    """V, from `static_voltage`."""
    residual_capacitor_v: float
    integrity: Integrity
    checks: tuple[Check, ...]
    scenario: dict[str, Any] | None = None
    """Where the trace is emulated and the scenario is known: its whole content."""
    truth: dict[str, float] | None = None
    """isc, voc, imp, vmp, pmp, ff of the emulated source itself; None for a real one."""
    zero_voltage: Reading | None = None
    """Voltage codes just before closing, with the channel's input at its zero; None where the
    board cannot bring it there: the profile's zero was taken then."""
    full_rate: FullRatePairs | None = None
    """Raw pairs of one stretch; None where none were asked for."""
    scout: Trace | None = None
    """The coarse sweep before this one that steered it, if there was one."""

    @property
    def sound(self) -> bool:
        """True where every check held."""
        return all(check.holds for check in self.checks)

    @property
    def label(self) -> str:
        """See `label_of` - stands on the face of all that comes from this trace."""
        return label_of(self.emulated, self.rung)

    @cached_property
    def _figures(self) -> Figures:
        return extract(
            self.voltage,
            self.current,
            weight=self.weight,
            voltage_sigma=self.voltage_sigma,
            current_sigma=self.current_sigma,
            voc_static=self.voc_static,
        )

    def figures(self) -> Figures:
        """Isc, Voc, Imp, Vmp, Pmp and fill factor; see `kneewise.curve.figures`."""
        return self._figures
