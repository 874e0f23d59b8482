"""Is this trace to be believed? Each check has a name, what was found and what was expected."""

from __future__ import annotations

import numpy as np

from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import Check, Floats, Integrity, RawKnots

RAIL_CODE = 4090
STATIC_LIMIT = 0.005  # of Voc, between the static reading and the end of the curve
MONOTONIC_SIGMAS = 5.0
# Capacitance by charge balance refutes a gross fault only: parts are +-20 % new, and age.
CAPACITANCE_LIMIT = 0.35


def check_trace(
    raw: RawKnots,
    voltage: Floats,
    current: Floats,
    time: Floats,
    voltage_sigma: Floats,
    *,
    voc_static: float,
    residual_v: float,
    end_reason: str,
    integrity: Integrity,
    conversions_lost: bool,
    scales: Scales,
) -> tuple[Check, ...]:
    """All checks of one sweep, in the order in which people read them."""
    return (
        _whole(raw, integrity),
        Check(
            "every conversion in its place",
            integrity.ring_overruns == 0 and not conversions_lost,
            f"{integrity.ring_overruns} ring overruns, "
            f"{'a' if conversions_lost else 'no'} lost conversion",
            "none: a lost one swaps voltage and current",
        ),
        Check("ended by itself", end_reason == "complete", end_reason, "complete"),
        _within_range(raw),
        _rising(voltage, voltage_sigma),
        _ends_at_voc(voltage, voc_static),
        _charge_balance(voltage, current, time, scales),
        Check(
            "capacitor empty afterwards",
            residual_v < scales.safe_v,
            f"{residual_v:.2f} V",
            f"below {scales.safe_v:g} V",
        ),
    )


def _whole(raw: RawKnots, integrity: Integrity) -> Check:
    pairs = int(raw.pairs.sum())
    return Check(
        "whole",
        integrity.manifest_crc_ok and pairs == integrity.pairs,
        f"{len(raw)} knots of {pairs} pairs, CRC {'agrees' if integrity.manifest_crc_ok else 'no'}",
        f"{integrity.knots} knots of {integrity.pairs} pairs, as the manifest says",
    )


def _within_range(raw: RawKnots) -> Check:
    highest = max(
        float((raw.voltage_sum / raw.pairs).max()), float((raw.current_sum / raw.pairs).max())
    )
    return Check(
        "within the converter's range",
        highest < RAIL_CODE,
        f"highest mean code {highest:.0f}",
        f"below {RAIL_CODE}",
    )


def _rising(voltage: Floats, sigma: Floats) -> Check:
    fall = float(np.max(-np.diff(voltage) / np.hypot(sigma[1:], sigma[:-1])))
    return Check(
        "voltage rises throughout",
        fall < MONOTONIC_SIGMAS,
        f"largest fall {max(fall, 0.0):.1f} sigma",
        f"below {MONOTONIC_SIGMAS:g} sigma",
    )


def _ends_at_voc(voltage: Floats, voc_static: float) -> Check:
    off = voltage[-1] / voc_static - 1 if voc_static > 0 else float("inf")
    return Check(
        "ends where the source stood before",
        bool(abs(off) < STATIC_LIMIT),
        f"{100 * off:+.2f} % of the open voltage read before closing",
        f"within {100 * STATIC_LIMIT:g} %",
    )


def _charge_balance(voltage: Floats, current: Floats, time: Floats, scales: Scales) -> Check:
    """Charge over voltage rise; the series resistance adds its drop, which makes C read high."""
    charge = float(np.sum((current[1:] + current[:-1]) / 2 * np.diff(time)))
    rise = float(voltage[-1] - voltage[0])
    off = charge / rise / scales.capacitance_f - 1 if rise > 0 else float("inf")
    return Check(
        "charge agrees with the capacitor",
        bool(abs(off) < CAPACITANCE_LIMIT),
        f"{100 * off:+.1f} % off the profile's {scales.capacitance_f * 1e6:.0f} uF",
        f"within {100 * CAPACITANCE_LIMIT:g} %",
    )
