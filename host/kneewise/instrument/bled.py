"""Waiting out the bleed, with the capacitor's voltage told where it does not come to an end.

Comes in: a session. Goes out: the state afterwards, and a latched fault if there is one.
"""

from __future__ import annotations

from typing import Any

from kneewise.errors import DeviceFaultError, RefusedError
from kneewise.instrument.status import Status, fault_of, status_of
from kneewise.link.session import Session

BLEED_S = 60.0
FAULT_BLEED_S = 5.0
SAFE_TO_SHOW_V = 1.0  # in a fault, readings are waited for down to here


def wait_bled(session: Session, profile: dict[str, Any]) -> tuple[Status, DeviceFaultError | None]:
    """Until neither a charge nor its bleed is under way; the state, and a fault that is latched."""
    port = session.port
    start = port.clock()
    end = start + BLEED_S
    while True:
        message = session.request("status")
        status = status_of(message, profile)
        if status.state == "fault":
            fault = fault_of(message)
            # The bleed works in a fault as well, unless the contact has welded.
            falling = status.bleed_engaged and status.capacitor_v > SAFE_TO_SHOW_V
            if not falling or port.clock() >= start + FAULT_BLEED_S:
                return status, fault
            port.sleep(0.02)
            continue
        if status.state not in ("bleeding", "charging"):
            return status, None
        if port.clock() >= end:
            raise DeviceFaultError(
                "waiting for the bleed",
                found=f"{status.capacitor_v:.1f} V on the capacitor after {BLEED_S:g} s",
                expected="an empty capacitor",
                next_step="keep away from the terminals; check the bleed resistor",
                guard=1,
            )
        port.sleep(0.02)


def still_hot(status: Status, profile: dict[str, Any]) -> RefusedError:
    """The exception for a bleed resistor that must cool for longer than one waits."""
    return RefusedError(
        "getting ready for a sweep",
        found=f"H10: the bleed resistor has taken up {status.bleed_heat_j:.1f} J and needs "
        f"{status.rest_s:.0f} s to cool",
        expected=f"room for this source's sweep within {profile['bleed_mj'] / 1000:.1f} J",
        next_step=f"wait {status.rest_s:.0f} s, or fit a resistor that stands more "
        "(power_w and energy_j of [bleed] in the profile)",
        guard=10,
    )
