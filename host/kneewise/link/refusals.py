"""A refusal on the wire, made into an exception that people can act on."""

from __future__ import annotations

from typing import Any

from kneewire import catalogue
from kneewire.hazards import HAZARDS
from kneewire.messages import Message
from kneewise.errors import RefusedError

CODES = {text: code for code, text in catalogue.REFUSALS.items()}
UNKNOWN_SESSION = CODES["unknown session"]

_STEPS = {
    "unknown kind": "use firmware and host of the same version",
    "malformed": "use firmware and host of the same version",
    "unknown session": "greet the device again; it was reset or another host took over",
    "stale": "greet the device again; another program may be talking to it",
    "wrong state": "wait until the tracer is safe and bled, or clear its fault",
    "busy charging": "wait for the sweep to end",
    "bad token": "arm again; a token is good for one fire and for a short time",
    "no held sweep": "sweep first",
    "another sweep is held": "fetch and acknowledge the held sweep first",
    "out of range": "choose a value within the limits that hello gives",
}


def quantity(value: int, unit: int) -> str:
    """A measured value or limit with its unit, in the unit that people read."""
    name = catalogue.UNITS.get(unit, "")
    if name in ("mV", "mA"):
        return f"{value / 1000:.3f} {name[1:]}"
    return f"{value} {name}".strip()


def hazard_text(guard: int, measured: int, limit: int, unit: int) -> tuple[str, str, str]:
    """(found, expected, next step) for a hazard's finding."""
    name, wrong, step = HAZARDS.get(
        guard, (f"hazard H{guard}", "a guard spoke", "see device/README.md")
    )
    if catalogue.UNITS.get(unit, "") == "":
        return f"H{guard} {name}: {wrong}", "the guard satisfied", step
    return (
        f"H{guard} {name}: {wrong}, {quantity(measured, unit)}",
        f"at most {quantity(limit, unit)}",
        step,
    )


def refused(name: str, message: Message) -> RefusedError:
    """The exception for a refusal of the request `name`."""
    values: dict[str, Any] = message.values
    code = catalogue.REFUSALS.get(values["code"], f"code {values['code']}")
    if values["guard"]:
        found, expected, step = hazard_text(
            values["guard"], values["measured"], values["limit"], values["unit"]
        )
        if code != "interlock":
            found = f"{code}; {found}"
    else:
        found, expected, step = code, "a request that can be granted now", _STEPS.get(code, "")
    return RefusedError(
        f"{name} was refused",
        found=found,
        expected=expected,
        next_step=step,
        code=values["code"],
        guard=values["guard"],
    )
