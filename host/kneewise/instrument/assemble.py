"""From what a device sent to a trace: scale factors applied, checks made."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from kneewire import catalogue
from kneewire.messages import Message
from kneewise.errors import TrustError
from kneewise.instrument.checks import check_trace
from kneewise.instrument.convert import convert
from kneewise.instrument.full_rate import FullRatePairs
from kneewise.instrument.profile import Scales
from kneewise.instrument.sweep import Reassembly
from kneewise.instrument.trace import Integrity, RawPairs, Reading, Trace

FEWEST_KNOTS = 8
# Why a sweep without a curve ended, where the source is what failed: a short closed limit may
# be over before the device calls it dark.
NEVER_CONDUCTED = ("no current", "time limit")


# What a profile must hold before a sweep can be converted.
SCALES = (
    "voltage_nv_per_code",
    "current_na_per_code",
    "capacitor_nv_per_code",
    "capacitance_nf",
)


def assemble(
    manifest: Message,
    reassembly: Reassembly,
    pairs: RawPairs,
    *,
    asked: int | None,
    rung: str,
    device: dict[str, Any],
    profile: dict[str, Any],
    frames_bad: int,
    started_utc: str,
    started_uncertainty_s: float,
    scenario: dict[str, Any] | None,
    truth: dict[str, float] | None,
) -> Trace:
    """The trace of a whole sweep. `device` is its hello, `profile` the values of its record.

    `pairs` are the raw ones, `asked` how many were asked for, where that is known.
    TrustError where there are too few knots to speak of a curve.
    """
    values = manifest.values
    raw = reassembly.knots()
    end_reason = catalogue.END_REASONS.get(values["end_reason"], str(values["end_reason"]))
    if len(raw) < FEWEST_KNOTS:
        raise TrustError(
            f"sweep {values['sweep_id'].hex()[:8]}",
            found=f"{len(raw)} knots (ended: {end_reason})",
            expected="a curve",
            next_step="check that the source is lit and connected, then sweep again"
            if end_reason in NEVER_CONDUCTED
            else "clear what ended the sweep, then sweep again",
        )
    scaled = all(profile.get(name) for name in SCALES)
    ordered = raw.time_us[0] >= values["conducting_us"] and bool((np.diff(raw.time_us) > 0).all())
    counted = bool(
        values["conversions"] and values["pair_ns"] and values["bin_pairs"] and raw.pairs.all()
    )
    if not scaled or not counted or not ordered:
        raise TrustError(
            f"sweep {values['sweep_id'].hex()[:8]}",
            found="no valid profile on the device"
            if not scaled
            else ("sums over nothing" if ordered else "times that do not rise"),
            expected="knots of at least one pair each, readings, and the scales for them",
            next_step="store the profile of this board on the device, and use firmware and host "
            "of the same version; then sweep again",
        )
    scales = Scales.of(profile)
    static = Reading(values["voltage_sum"], values["conversions"])
    zero = Reading(values["current_sum"], values["conversions"])
    zero_voltage = None
    if values["zero_conversions"]:
        zero_voltage = Reading(values["voltage_zero_sum"], values["zero_conversions"])
    si = convert(
        raw,
        scales,
        static_voltage=static,
        zero_current=zero,
        zero_voltage=zero_voltage,
        pair_ns=values["pair_ns"],
        skew_ns=values["skew_ns"],
        bin_pairs=values["bin_pairs"],
    )
    integrity = Integrity(
        knots=values["knots"],
        pairs=values["pairs"],
        frames_bad=frames_bad,
        blocks_resent=reassembly.resent,
        ring_overruns=values["ring_overruns"],
        manifest_crc_ok=reassembly.crc_ok(),
        bounces=values["bounces"],
    )
    full_rate = None
    if asked or len(pairs):
        full_rate = FullRatePairs(
            raw=pairs,
            asked=asked,
            pair_ns=values["pair_ns"],
            skew_ns=values["skew_ns"],
            scales=replace(
                scales,
                voltage_zero_code=si.voltage_zero_code,
                current_zero_code=si.current_zero_code,
            ),
        )
    residual_v = scales.capacitor(values["residual_sum"] / max(values["residual_conversions"], 1))
    return Trace(
        trace_id=values["sweep_id"].hex(),
        rung=rung,
        emulated=bool(device["flags"] & catalogue.FLAG_EMULATED),
        device={
            "device_id": device["device_id"].hex(),
            "firmware": "{firmware_major}.{firmware_minor}.{firmware_patch}".format_map(device),
            "protocol": "{major}.{minor}".format_map(device),
            "profile_crc": f"{values['profile_crc']:08x}",
            "boot_nonce": f"{device['boot_nonce']:08x}",
        },
        profile=profile,
        started_utc=started_utc,
        started_uncertainty_s=started_uncertainty_s,
        end_reason=end_reason,
        raw=raw,
        static_voltage=static,
        zero_current=zero,
        voltage=si.voltage,
        current=si.current,
        time=si.time,
        weight=si.weight,
        voltage_sigma=si.voltage_sigma,
        current_sigma=si.current_sigma,
        voc_static=si.voc_static,
        residual_capacitor_v=residual_v,
        integrity=integrity,
        checks=check_trace(
            raw,
            si.voltage,
            si.current,
            si.time,
            si.voltage_sigma,
            voc_static=si.voc_static,
            residual_v=residual_v,
            conducting_us=values["conducting_us"],
            pair_ns=values["pair_ns"],
            end_reason=end_reason,
            integrity=integrity,
            conversions_lost=bool(values["conversions_lost"]),
            scales=scales,
            zero_off=(
                si.voltage_zero_code - scales.voltage_zero_code if zero_voltage else None,
                si.current_zero_code - scales.current_zero_code,
            ),
            bounce_ms=profile.get("bounce_ms", 0),
            pairs=pairs,
        ),
        scenario=scenario,
        truth=truth,
        zero_voltage=zero_voltage,
        full_rate=full_rate,
    )
