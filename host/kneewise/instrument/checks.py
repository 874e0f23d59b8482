"""Is this trace to be believed? Each check has a name, what was found and what was expected."""

from __future__ import annotations

import numpy as np

from kneewise.curve.unbend import Cells
from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import Check, Codes, Floats, Integrity, RawKnots, RawPairs

RAIL_CODES = 5 / 4096  # of the range, below its last code
STATIC_LIMIT = 0.005  # of Voc, between the static reading and the end of the curve
ZERO_CODES = 24 / 4096  # of the range, between a zero and the profile's, as on the device
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
    conducting_us: int,
    pair_ns: int,
    end_reason: str,
    integrity: Integrity,
    conversions_lost: bool,
    scales: Scales,
    zero_off: tuple[float | None, float],
    bounce_ms: int,
    pairs: RawPairs,
) -> tuple[Check, ...]:
    """All checks of one sweep, in the order in which people read them.

    `zero_off`: codes between the zeros read and the profile's, of voltage (None where its was
    not read) and current.
    """
    return (
        _whole(raw, integrity),
        *_pairs_add_up(raw, pairs),
        Check(
            "every conversion in its place",
            integrity.ring_overruns == 0 and not conversions_lost,
            f"{integrity.ring_overruns} ring overruns, "
            f"{'a' if conversions_lost else 'no'} lost conversion",
            "none: a lost one swaps voltage and current",
        ),
        Check("ended by itself", end_reason == "complete", end_reason, "complete"),
        *_closed_for_good(integrity.bounces, bounce_ms),
        _zeros(*zero_off, scales.code_max),
        _evenly_timed(raw, conducting_us, pair_ns),
        _within_range(raw, scales.code_max),
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


def _pairs_add_up(raw: RawKnots, pairs: RawPairs) -> list[Check]:
    """Knots that lie within the stretch are sums over its pairs, code by code."""
    if not len(pairs):
        return []
    after = np.cumsum(raw.pairs.astype(np.int64))
    begin, end = after - raw.pairs.astype(np.int64) - pairs.first, after - pairs.first
    within = (begin >= 0) & (end <= len(pairs))

    def sums(codes: Codes) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
        up_to = np.concatenate(([0], np.cumsum(codes, dtype=np.int64)))
        return np.asarray(up_to[end[within]] - up_to[begin[within]])

    alike = (sums(pairs.voltage) == raw.voltage_sum[within].astype(np.int64)) & (
        sums(pairs.current) == raw.current_sum[within].astype(np.int64)
    )
    last = pairs.first + len(pairs)
    return [
        Check(
            "raw pairs add up to their knots",
            bool(alike.all()) and last <= int(after[-1]),
            f"{np.count_nonzero(alike)} knots of the {len(alike)} within the stretch, "
            f"pairs up to {last} of {int(after[-1])}",
            "each knot within it the sum over its pairs, and no pair behind the last knot",
        )
    ]


def _closed_for_good(bounces: int, bounce_ms: int) -> list[Check]:
    """Refuses nothing: what came before the last closing is no part of the curve."""
    if not bounces and not bounce_ms:
        return []
    should = f"bounces are over within {bounce_ms} ms" if bounce_ms else "a contact without bounce"
    return [
        Check(
            "contact closed for good",
            True,
            f"opened again {bounces} times before, which is cut off"
            if bounces
            else "without opening again",
            f"{should}, by the profile",
        )
    ]


def _zeros(voltage_off: float | None, current_off: float, code_max: int) -> Check:
    most = ZERO_CODES * (code_max + 1)
    read = "not read" if voltage_off is None else f"{voltage_off:+.1f} codes"
    return Check(
        "zeros near the profile's",
        abs(voltage_off or 0.0) <= most and abs(current_off) <= most,
        f"voltage {read}, current {current_off:+.1f} codes off",
        f"within {most:.0f} codes",
    )


def _evenly_timed(raw: RawKnots, conducting_us: int, pair_ns: int) -> Check:
    """Knots are taken apart by the counts of their pairs, so their times must agree with them."""
    told = (raw.time_us - np.uint64(conducting_us)).astype(np.float64)
    off = float(np.abs(told - Cells.of(raw.pairs).middles * pair_ns * 1e-3).max())
    return Check(
        "times agree with the counts of pairs",
        off < 1.5,
        f"at most {off:.1f} us off",
        "whole microseconds apart from rounding",
    )


def _within_range(raw: RawKnots, code_max: int) -> Check:
    rail = code_max - RAIL_CODES * (code_max + 1)
    highest = max(
        float((raw.voltage_sum / raw.pairs).max()), float((raw.current_sum / raw.pairs).max())
    )
    return Check(
        "within the converter's range",
        highest < rail,
        f"highest mean code {highest:.0f}",
        f"below {rail:.0f}",
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
