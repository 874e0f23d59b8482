"""What a device refuses, or says in place of an answer, made into exceptions that help."""

from __future__ import annotations

import re
from typing import Any

from kneewire import PROTOCOL, catalogue
from kneewire.hazards import HAZARDS
from kneewire.messages import Message, fingerprint
from kneewise.errors import LinkError, ProtocolError, RefusedError

CODES = {text: code for code, text in catalogue.REFUSALS.items()}

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
        f"{_bound(measured, limit)} {quantity(limit, unit)}",
        step,
    )


def _bound(measured: int, limit: int) -> str:
    """What kind of limit it is; what is off by less than nothing has one on either side."""
    if measured < 0:
        return "within"
    return "at most" if measured > limit else "at least"


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
        measured=values["measured"],
        unit=catalogue.UNITS.get(values["unit"], ""),
    )


_TRACEBACK = re.compile(r"Traceback \(most recent call last\):\r?\n(?:[ \t].*\n)*[^\r\n]*")
_ERROR = re.compile(r"^\w+(?:Error|Exception)\b[^\r\n]*", re.MULTILINE)


def traceback_in(said: str) -> str:
    """The last traceback in what a device said outside frames, or ""."""
    # What was said before the port was open is cut short: its last line may be all that is left.
    found = _TRACEBACK.findall(said) or _ERROR.findall(said)
    return found[-1].replace("\r", "") if found else ""


def silent(
    asked: str, deadline_s: float, said: str, at_prompt: bool, crash: str, summary: str
) -> LinkError | ProtocolError:
    """The exception for a request without a reply.

    `said` is what came outside frames, `crash` the traceback that an earlier prompt showed.
    """
    # Without the firmware's files, the line that starts it ends in an ImportError.
    traceback = traceback_in(said)
    if traceback and "ImportError" not in traceback:
        return ProtocolError(
            asked,
            found=f"a traceback: {_brief(traceback)}",
            expected="the Kneewise firmware",
            next_step="reset the board; if it happens again, store the firmware on it anew "
            "(device/README.md) or report the traceback",
        )
    if at_prompt:
        return ProtocolError(
            asked,
            found="a MicroPython prompt, and no firmware that could be started from it"
            + (f", after a traceback: {_brief(crash)}" if crash else ""),
            expected="the Kneewise firmware",
            next_step="reset the board to start the firmware; if the prompt comes back, "
            "store the firmware on it (device/README.md)",
        )
    return LinkError(
        asked,
        found=f"no answer in {deadline_s:g} s ({summary})",
        expected="a reply",
        next_step="check that this is the tracer's port and that the tracer has power; "
        "the capacitor may hold charge",
    )


def _brief(traceback: str) -> str:
    """Where it was, and what."""
    return ", ".join(line.strip() for line in traceback.splitlines()[-2:])


def other_version(port_name: str, reply: dict[str, Any]) -> ProtocolError:
    """The exception for a device whose hello names another version."""
    firmware = ".".join(str(reply[f"firmware_{part}"]) for part in ("major", "minor", "patch"))
    return ProtocolError(
        f"greeting {port_name}",
        found=f"the device has protocol {reply['major']}.{reply['minor']}, "
        f"catalogue {reply['fingerprint']:08x} (firmware {firmware})",
        expected=f"the host has protocol {PROTOCOL[0]}.{PROTOCOL[1]}, "
        f"catalogue {fingerprint():08x}",
        next_step="store the firmware that came with this host on the device, "
        "or install the host version that came with that firmware",
    )


def impossible_hello(port_name: str, reply: dict[str, Any]) -> ProtocolError:
    """The exception for a device whose hello names limits that no device can have."""
    return ProtocolError(
        f"greeting {port_name}",
        found=f"a window of {reply['window']} blocks, frames of {reply['max_frame']} bytes",
        expected="at least 1 block, and frames of at least 64 bytes",
        next_step="store the firmware that came with this host on the device",
    )
