"""Board profiles: a TOML file that people edit, a record of integers that the device holds.

Comes in: TOML, or a record read from a device. Goes out: the record, or `Scales` for turning
codes into volts and amperes. Which values are wise is the workshop's business.
"""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Any, Literal, Self

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from kneewire import guards
from kneewire.profile_record import FORMAT, pack_profile, unpack_profile
from kneewise.errors import ProfileError

_EPOCH = date(1970, 1, 1)


def day_of(text: str) -> int:
    """Days since 1970-01-01 of a date such as 2031-05-17; 0 for none."""
    return (date.fromisoformat(text) - _EPOCH).days if text else 0


class _Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class ConverterSection(_Section):
    kind: Literal["internal", "spi16"]
    pair_us: int = Field(ge=2, le=100)
    wide_code_lsb: float = Field(ge=1, le=32)
    spi_clock_mhz: float = Field(ge=0, le=60)
    spi_convert_us: float = Field(ge=0, le=60)

    @model_validator(mode="after")
    def _of_its_kind(self) -> Self:
        spi = (self.spi_clock_mhz, self.spi_convert_us)
        if self.kind == "internal" and (self.pair_us != 4 or any(spi)):
            raise ValueError("internal goes with pair_us = 4 and zeros for spi_")
        if self.kind == "spi16" and (not all(spi) or self.wide_code_lsb != 1):
            raise ValueError("spi16 needs spi_clock_mhz and spi_convert_us, and wide_code_lsb = 1")
        return self


class VoltageSection(_Section):
    per_code_v: float = Field(gt=0, le=1.0)
    zero_code: float = Field(ge=0, le=4095)
    delay_us: float = Field(ge=0, le=1000)
    divider_ohm: float = Field(ge=1e3, le=1e9)
    zero_switch: bool
    lead_ohm: float = Field(ge=0, le=100)


class CurrentSection(_Section):
    per_code_a: float = Field(gt=0, le=1.0)
    zero_code: float = Field(ge=0, le=4095)
    delay_us: float = Field(ge=0, le=1000)


class CapacitorSection(_Section):
    per_code_v: float = Field(gt=0, le=1.0)
    zero_code: float = Field(ge=0, le=4095)
    capacitance_f: float = Field(gt=0, le=1.0)
    low_percent: int = Field(ge=50, le=100)
    high_percent: int = Field(ge=100, le=200)
    permanent_bleeder_ohm: float = Field(gt=0, le=1e8)


class BleedSection(_Section):
    ohm: float = Field(gt=0, le=1e6)
    power_w: float = Field(gt=0, le=1000)
    energy_j: float = Field(gt=0, le=10000)
    thermal_cutoff: bool


class TimingSection(_Section):
    relay_operate_ms: int = Field(ge=1, le=200)
    relay_release_ms: int = Field(ge=1, le=200)
    bleed_operate_ms: int = Field(ge=1, le=200)
    bleed_release_ms: int = Field(ge=1, le=200)
    switch_release_us: int = Field(ge=0, le=10000)
    bounce_ms: int = Field(ge=0, le=20)
    dead_time_ms: int = Field(ge=20, le=1000)


class LimitsSection(_Section):
    rated_v: float = Field(gt=0, le=1000)
    rated_a: float = Field(gt=0, le=100)
    safe_v: float = Field(gt=0, le=60)
    start_percent_of_voc: float = Field(gt=0, le=5)
    near_zero_percent_of_rating: float = Field(gt=0, le=5)
    bleed_time_percent: int = Field(ge=110, le=400)
    pulse_ms: float = Field(ge=1, le=20)
    closed_limit_s: float = Field(ge=0.01, le=120)
    token_life_s: float = Field(ge=0.5, le=10)
    heartbeat_lost_s: float = Field(ge=1, le=10)
    proof_test_days: int = Field(ge=1, le=366)


class IsolationSection(_Section):
    rating_v: int = Field(ge=0, le=10000)
    tested: str = Field(pattern=r"^(\d{4}-\d{2}-\d{2})?$")


class ClassBSection(_Section):
    """What the builder of a class B tracer declares; all of it, or the firmware refuses."""

    reinforced_isolation: bool
    contact_breaks_dc: bool
    disconnector: bool
    fuse: bool
    reviewer: str = Field(max_length=30)
    reviewed: str = Field(pattern=r"^(\d{4}-\d{2}-\d{2})?$")

    def bits(self) -> int:
        """As in the record's `declared`."""
        return (
            guards.DECLARED_BARRIER * self.reinforced_isolation
            + guards.DECLARED_CONTACT * self.contact_breaks_dc
            + guards.DECLARED_DISCONNECTOR * self.disconnector
            + guards.DECLARED_FUSE * self.fuse
        )


class BoardProfile(_Section):
    """A board profile as its TOML file says it."""

    name: str = Field(min_length=1, max_length=40)
    device_id: str = Field(pattern=r"^([0-9a-f]{16})?$")
    hazard_class: Literal["A", "B"]
    contact: Literal["relay+switch", "relay"]
    contact_breaks_dc: bool
    converter: ConverterSection
    voltage: VoltageSection
    current: CurrentSection
    capacitor: CapacitorSection
    bleed: BleedSection
    timing: TimingSection
    limits: LimitsSection
    isolation: IsolationSection
    class_b: ClassBSection

    @classmethod
    def load(cls, path: Path) -> BoardProfile:
        """Read a profile; ProfileError names the key and what it may be."""
        try:
            content = tomllib.loads(path.read_text(encoding="utf-8"))
        except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
            raise ProfileError(
                f"reading the profile {path}",
                found=str(error),
                expected="a TOML file",
                next_step="start from device/profiles/reference.toml",
            ) from error
        try:
            return cls.model_validate(content)
        except ValidationError as error:
            first = error.errors()[0]
            key = ".".join(str(part) for part in first["loc"])
            raise ProfileError(
                f"checking the profile {path}",
                found=f"{key}: {first['msg']}",
                expected="every key of the reference profile, within its range",
                next_step="compare with device/profiles/reference.toml",
            ) from error

    def record(self, device_id: bytes | None = None) -> bytes:
        """The record for the device; bound to `device_id` where the file names none."""
        return pack_profile(self._values(device_id))

    def _values(self, device_id: bytes | None) -> dict[str, Any]:
        limits, capacitor, timing = self.limits, self.capacitor, self.timing
        bleed, class_b = self.bleed, self.class_b
        return {
            "format": FORMAT,
            "name": self.name,
            "device_id": bytes.fromhex(self.device_id) or device_id or bytes(8),
            "hazard_class": 1 if self.hazard_class == "A" else 2,
            "contact": 1 if self.contact == "relay+switch" else 2,
            "breaks_dc": int(self.contact_breaks_dc),
            "switch_release_us": timing.switch_release_us,
            "converter": 1 if self.converter.kind == "internal" else 2,
            "pair_us": self.converter.pair_us,
            "spi_clock_khz": round(self.converter.spi_clock_mhz * 1e3),
            "spi_convert_ns": round(self.converter.spi_convert_us * 1e3),
            "wide_code_x16": round(self.converter.wide_code_lsb * 16),
            "zero_switch": int(self.voltage.zero_switch),
            "voltage_nv_per_code": round(self.voltage.per_code_v * 1e9),
            "voltage_zero_x16": round(self.voltage.zero_code * 16),
            "current_na_per_code": round(self.current.per_code_a * 1e9),
            "current_zero_x16": round(self.current.zero_code * 16),
            "capacitor_nv_per_code": round(capacitor.per_code_v * 1e9),
            "capacitor_zero_x16": round(capacitor.zero_code * 16),
            "voltage_delay_ns": round(self.voltage.delay_us * 1e3),
            "current_delay_ns": round(self.current.delay_us * 1e3),
            "divider_ohm": round(self.voltage.divider_ohm),
            "lead_mohm": round(self.voltage.lead_ohm * 1e3),
            "rated_mv": round(limits.rated_v * 1e3),
            "rated_ma": round(limits.rated_a * 1e3),
            "capacitance_nf": round(capacitor.capacitance_f * 1e9),
            "capacitance_low_percent": capacitor.low_percent,
            "capacitance_high_percent": capacitor.high_percent,
            "bleed_mohm": round(bleed.ohm * 1e3),
            "bleed_mw": round(bleed.power_w * 1e3),
            "bleed_mj": round(bleed.energy_j * 1e3),
            "bleed_cutoff": int(bleed.thermal_cutoff),
            "permanent_bleeder_ohm": round(capacitor.permanent_bleeder_ohm),
            "relay_operate_ms": timing.relay_operate_ms,
            "relay_release_ms": timing.relay_release_ms,
            "bleed_operate_ms": timing.bleed_operate_ms,
            "bleed_release_ms": timing.bleed_release_ms,
            "bounce_ms": timing.bounce_ms,
            "dead_time_ms": timing.dead_time_ms,
            "safe_mv": round(limits.safe_v * 1e3),
            "start_permyriad": round(limits.start_percent_of_voc * 100),
            "near_zero_permyriad": round(limits.near_zero_percent_of_rating * 100),
            "bleed_time_percent": limits.bleed_time_percent,
            "pulse_us": round(limits.pulse_ms * 1e3),
            "closed_limit_ms": round(limits.closed_limit_s * 1e3),
            "token_life_ms": round(limits.token_life_s * 1e3),
            "heartbeat_lost_ms": round(limits.heartbeat_lost_s * 1e3),
            "isolation_v": self.isolation.rating_v,
            "isolation_tested_day": day_of(self.isolation.tested),
            "declared": class_b.bits(),
            "reviewer": class_b.reviewer,
            "reviewed_day": day_of(class_b.reviewed),
            "proof_days": limits.proof_test_days,
        }


@dataclass(frozen=True, slots=True)
class Scales:
    """From codes to SI units, from a device's profile record."""

    voltage_v_per_code: float
    voltage_zero_code: float
    current_a_per_code: float
    current_zero_code: float
    capacitor_v_per_code: float
    capacitor_zero_code: float
    voltage_delay_s: float
    current_delay_s: float
    divider_ohm: float
    lead_ohm: float
    capacitance_f: float
    safe_v: float
    code_max: int
    wide_code_lsb: float
    """Width of the wide codes; 1 for a converter that has none."""

    @classmethod
    def of(cls, values: dict[str, Any]) -> Scales:
        return cls(
            voltage_v_per_code=values["voltage_nv_per_code"] * 1e-9,
            voltage_zero_code=values["voltage_zero_x16"] / 16,
            current_a_per_code=values["current_na_per_code"] * 1e-9,
            current_zero_code=values["current_zero_x16"] / 16,
            capacitor_v_per_code=values["capacitor_nv_per_code"] * 1e-9,
            capacitor_zero_code=values["capacitor_zero_x16"] / 16,
            voltage_delay_s=values["voltage_delay_ns"] * 1e-9,
            current_delay_s=values["current_delay_ns"] * 1e-9,
            divider_ohm=float(values["divider_ohm"]),
            lead_ohm=values["lead_mohm"] * 1e-3,
            capacitance_f=values["capacitance_nf"] * 1e-9,
            safe_v=values["safe_mv"] * 1e-3,
            code_max=4095 if values["converter"] == 1 else 65535,
            wide_code_lsb=values["wide_code_x16"] / 16,
        )

    def voltage(self, code: float) -> float:
        return (code - self.voltage_zero_code) * self.voltage_v_per_code

    def current(self, code: float) -> float:
        return (code - self.current_zero_code) * self.current_a_per_code

    def capacitor(self, code: float) -> float:
        return (code - self.capacitor_zero_code) * self.capacitor_v_per_code


def read_record(record: bytes) -> dict[str, Any]:
    """The values of a device's profile record, bytes as hex text. ProfileError."""
    try:
        values = unpack_profile(record)
    except ValueError as error:
        raise ProfileError(
            "reading the device's profile",
            found=f"a record that cannot be read ({error}), {len(record)} bytes",
            expected="a profile record of this version",
            next_step="store the profile of this board on the device again",
        ) from error
    return {
        name: value.hex() if isinstance(value, bytes) else value for name, value in values.items()
    }
