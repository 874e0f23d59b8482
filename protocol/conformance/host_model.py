"""What the scripted device has in place of hardware: a profile, and a made-up curve."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from kneewire.messages import pack_knot, unpack_knots
from kneewire.profile_record import FORMAT

PAIR_US = 4
LIFE_MS = 2000
CONVERSIONS = 256

PROFILE: dict[str, Any] = {
    "format": FORMAT,
    "name": "scripted device",
    "device_id": b"SCRIPTED",
    "hazard_class": 1,
    "contact": 1,
    "breaks_dc": 1,
    "switch_release_us": 50,
    "converter": 1,
    "pair_us": PAIR_US,
    "spi_clock_khz": 0,
    "spi_convert_ns": 0,
    "wide_code_x16": 16,
    "zero_switch": 1,
    "voltage_nv_per_code": 16500000,
    "voltage_zero_x16": 16 * 24,
    "current_na_per_code": 5200000,
    "current_zero_x16": 16 * 40,
    "capacitor_nv_per_code": 16500000,
    "capacitor_zero_x16": 16 * 24,
    "voltage_delay_ns": 0,
    "current_delay_ns": 0,
    "divider_ohm": 1000000,
    "lead_mohm": 0,
    "rated_mv": 60000,
    "rated_ma": 20000,
    "capacitance_nf": 2200000,
    "capacitance_low_percent": 70,
    "capacitance_high_percent": 130,
    "bleed_mohm": 100000,
    "bleed_mw": 10000,
    "bleed_mj": 40000,
    "bleed_cutoff": 1,
    "permanent_bleeder_ohm": 22000,
    "relay_operate_ms": 10,
    "relay_release_ms": 5,
    "bleed_operate_ms": 6,
    "bleed_release_ms": 6,
    "bounce_ms": 0,
    "dead_time_ms": 20,
    "safe_mv": 12000,
    "start_permyriad": 50,
    "near_zero_permyriad": 100,
    "bleed_time_percent": 150,
    "pulse_us": 5000,
    "closed_limit_ms": 120000,
    "token_life_ms": LIFE_MS,
    "heartbeat_lost_ms": 2000,
    "isolation_v": 0,
    "isolation_tested_day": 0,
    "declared": 0,
    "reviewer": "",
    "reviewed_day": 0,
    "proof_days": 90,
}


@dataclass(frozen=True, slots=True)
class Curve:
    """Knots of a made-up sweep: i(v) = isc (1 - exp((v - voc) / a)), with dt = C dv / i."""

    isc_a: float = 0.12
    voc_v: float = 39.0
    a_v: float = 1.6
    farad: float = 2.2e-3

    def current_a(self, volt: float) -> float:
        return self.isc_a * (1 - math.exp((volt - self.voc_v) / self.a_v))

    def records(self, many: int, start_us: int) -> tuple[bytes, int, int]:
        """The knot records, their pairs, and the time at which the last ends (us)."""
        step = 0.9985 * self.voc_v / max(many - 1, 1)
        at_us = start_us
        out = b""
        all_pairs = 0
        for number in range(many):
            volt = number * step
            pairs = max(round(1e6 * self.farad * step / self.current_a(volt) / PAIR_US), 1)
            ampere = self.current_a(volt)
            knot = {
                "time_us": at_us + (pairs - 1) * PAIR_US // 2,
                "voltage_sum": round(pairs * code(volt, "voltage_nv_per_code", 24)),
                "current_sum": round(pairs * code(ampere, "current_na_per_code", 40)),
                "pairs": pairs,
                "voltage_scatter": 6 * pairs,
                "current_scatter": 6 * pairs,
            }
            out += pack_knot(knot)
            all_pairs += pairs
            at_us += pairs * PAIR_US
        return out, all_pairs, at_us


def raw_pairs(records: bytes, first: int, many: int) -> bytes:
    """Raw pairs from pair `first` on, `many` at most: the means of the knots that they are in."""
    out = b""
    place = 0
    for knot in unpack_knots(records):
        after = place + knot["pairs"]
        inside = min(after, first + many) - max(place, first)
        means = (round(knot[name] / knot["pairs"]) for name in ("voltage_sum", "current_sum"))
        out += b"".join(mean.to_bytes(2, "little") for mean in means) * max(inside, 0)
        place = after
    return out


def code(value: float, scale: str, zero: float) -> float:
    """The converter's code for a value in V or A."""
    return value / (1e-9 * int(PROFILE[scale])) + zero
