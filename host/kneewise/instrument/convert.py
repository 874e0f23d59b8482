"""From raw knots to volts, amperes and seconds.

What is taken out: zeros, scale factors, the time between a voltage and its current conversion
with the delay of each channel, the divider's own current, and lead resistance where sensing is
two-wire.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import Floats, RawKnots, Reading

QUANTIZING_VARIANCE = 1 / 12  # code^2, of an ideal converter without noise


@dataclass(frozen=True, slots=True)
class Converted:
    """Arrays of shape (n,), SI units; see `Trace`."""

    voltage: Floats
    current: Floats
    time: Floats
    weight: Floats
    voltage_sigma: Floats
    current_sigma: Floats


def convert(
    raw: RawKnots, scales: Scales, zero_current: Reading, *, conducting_us: int, skew_ns: int
) -> Converted:
    """Knots in SI units.

    The voltage is moved along its own slope to the moment of the current: by the skew, less
    the voltage channel's delay, plus the current channel's.
    """
    pairs = raw.pairs.astype(np.float64)
    time = (raw.time_us - np.uint64(conducting_us)).astype(np.float64) * 1e-6
    voltage = (raw.voltage_sum / pairs - scales.voltage_zero_code) * scales.voltage_v_per_code
    current = (raw.current_sum / pairs - zero_current.code) * scales.current_a_per_code
    later_s = skew_ns * 1e-9 + scales.voltage_delay_s - scales.current_delay_s
    if len(raw) > 1:
        voltage = voltage + np.gradient(voltage, time) * later_s
    current = current + voltage / scales.divider_ohm
    voltage = voltage + current * scales.lead_ohm
    return Converted(
        voltage=voltage,
        current=current,
        time=time,
        weight=pairs,
        voltage_sigma=_sigma(raw.voltage_scatter, pairs) * scales.voltage_v_per_code,
        current_sigma=_sigma(raw.current_scatter, pairs) * scales.current_a_per_code,
    )


def _sigma(scatter: np.ndarray[tuple[int], np.dtype[np.uint64]], pairs: Floats) -> Floats:
    """Standard deviation (codes) of each knot's mean, from differences of successive codes.

    The sum of squared successive differences over 2n estimates the variance without the ramp
    (von Neumann, Annals of Mathematical Statistics 12 (1941) 367, from memory).
    """
    variance = scatter.astype(np.float64) / (2 * pairs)
    result: Floats = np.sqrt(np.maximum(variance, QUANTIZING_VARIANCE) / pairs)
    return result
