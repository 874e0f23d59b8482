"""The state of a tracer and its live readings, from a status reply."""

from __future__ import annotations

from dataclasses import dataclass
from math import nan
from typing import Any

from kneewire import catalogue
from kneewire.messages import Message
from kneewise.errors import DeviceFaultError
from kneewise.instrument.profile import Scales
from kneewise.link.refusals import hazard_text


@dataclass(frozen=True, slots=True)
class Status:
    """State and live readings; V and A are nan where the device has no valid profile."""

    state: str
    contact_closed: bool
    bleed_engaged: bool
    stop_loop_closed: bool
    leads_reversed: bool
    source_v: float
    current_a: float
    capacitor_v: float
    held_sweep: str
    """Id of a sweep that waits for its acknowledgement, or ""."""
    device_us: int
    bleed_heat_j: float
    """What the bleed resistor has taken up, by the device's account."""
    rest_s: float
    """Until it has room for a sweep of this source."""


def status_of(message: Message, profile: dict[str, Any]) -> Status:
    """`profile`: values of the device's profile record, empty where it has none."""
    values = message.values
    scales = Scales.of(profile) if profile else None

    def mean(name: str) -> float:
        return float(values[name]) / values["conversions"] if values["conversions"] else nan

    return Status(
        state=catalogue.STATES.get(values["state"], f"state {values['state']}"),
        contact_closed=bool(values["contact_closed"]),
        bleed_engaged=bool(values["bleed_engaged"]),
        stop_loop_closed=bool(values["stop_loop_closed"]),
        leads_reversed=bool(values["leads_reversed"]),
        source_v=scales.voltage(mean("voltage_sum")) if scales else nan,
        current_a=scales.current(mean("current_sum")) if scales else nan,
        capacitor_v=scales.capacitor(mean("capacitor_sum")) if scales else nan,
        held_sweep=values["sweep_id"].hex() if values["held"] else "",
        device_us=values["time_us"],
        bleed_heat_j=values["bleed_mj"] / 1000,
        rest_s=values["rest_ms"] / 1000,
    )


def fault_of(message: Message) -> DeviceFaultError:
    """The latched fault of a status reply, as an exception."""
    values = message.values
    found, expected, step = hazard_text(
        values["guard"], values["measured"], values["limit"], values["unit"]
    )
    return DeviceFaultError(
        "the tracer has latched a fault",
        found=found,
        expected=expected,
        next_step=f"{step}; then `kneewise rest --clear-fault`",
        guard=values["guard"],
        measured=values["measured"],
        unit=catalogue.UNITS.get(values["unit"], ""),
    )
