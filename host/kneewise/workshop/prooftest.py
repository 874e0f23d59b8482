"""The proof test: each guard provoked at the bench, and what became of it.

Comes in: an open tracer and an operator. Goes out: a `ProofTest` with a row for each step and
each guard. Two parts: with the source absent, then with a current-limited bench supply. The first
step that fails ends it, as do Ctrl-C and an operator who does not go on; the tracer is brought
to its safe state then, and the steps that are left say why they were not done.
"""

from __future__ import annotations

from contextlib import suppress
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any

from kneewire import guards
from kneewire.hazards import GUARDS, HAZARDS
from kneewise.errors import DeviceFaultError, KneewiseError, RefusedError
from kneewise.instrument.cautions import demand
from kneewise.instrument.connection import Connection
from kneewise.instrument.hands import Task
from kneewise.instrument.logbook import Logbook
from kneewise.instrument.trace import REPLAY
from kneewise.instrument.tracer import Tracer
from kneewise.workshop import steps_absent, steps_supply
from kneewise.workshop.bench import Bench
from kneewise.workshop.evidence import (
    FAILED,
    NOT_APPLICABLE,
    NOT_DONE,
    NOT_HERE,
    PASSED,
    Findings,
    NotForThisBuild,
    StoppedError,
)
from kneewise.workshop.operator import Operator, wrapped

STOPPED = "stopped"
FEW = 2  # hazards that are named in words
STEPS = (*steps_absent.STEPS, *steps_supply.STEPS)

# What a bench cannot provoke: (why, what else shows it).
UNEXERCISED = {
    8: (
        "a host counts as lost after 2 s, and the charge of a bench supply lasts milliseconds",
        "the emulated tracer, in tests/device and tests/system of the project",
    ),
    17: (
        "this test stores no firmware",
        "what stores firmware looks at the state first, as `kneewise rest` shows it",
    ),
    18: (
        "a soft reset would take the firmware from under the test",
        "the emulated RP2040, in tests/chip of the project; main.py drives all outputs low first",
    ),
    19: (
        f"it speaks above {guards.ISOLATION_FREE_MV / 1000:g} V, a bench supply stays below",
        "the insulation test of the barrier, whose rating and date are in the profile",
    ),
}
FURTHER = {
    1: "latching of a bleed that is open: the emulated tracer",
    2: "a contact that welds in mid-charge: the emulated tracer",
    3: "contact and bleed commanded together: the sequencer, in tests/device of the project",
    4: "a trip in mid-charge: H6 takes the same way and is proven in flight",
    7: "a supervision that dies: the emulated RP2040, in tests/chip",
    9: "damaged frames, strange sessions: tests/protocol and tests/fuzz of the project",
    11: "sensors that go wrong in mid-charge: the emulated tracer",
    12: "a loop opened in mid-charge: the emulated tracer",
    14: "a profile that is missing, damaged or foreign: tests/device of the project",
}
"""What of a guard a bench does not reach, and where it is shown."""


@dataclass(slots=True)
class ProofTest:
    """How it went. `verdict`: passed, failed or stopped; `stopped` says where and why it ended
    before its end, `left` in what state.
    """

    tracer: Tracer
    who: str
    begun: datetime
    steps: list[Findings] = field(default_factory=list)
    ended: datetime | None = None
    verdict: str = STOPPED
    stopped: str = ""
    left: str = ""
    book: Logbook | None = None
    """The tracer's logbook at the end, where it could be read."""

    def content(self) -> dict[str, Any]:
        """The report's content, for `report.py`."""
        connection = self.tracer.connection
        hello = connection.device
        return {
            "label": self.tracer.label,
            "rung": self.tracer.rung,
            "device_id": hello["device_id"].hex(),
            "profile": {
                "name": self.tracer.profile["name"],
                "crc": f"{hello['profile_crc']:08x}",
            },
            "firmware": "{firmware_major}.{firmware_minor}.{firmware_patch}".format_map(hello),
            "protocol": "{major}.{minor}".format_map(hello),
            "who": self.who,
            "begun_utc": _text(self.begun),
            "ended_utc": _text(self.ended or self.begun),
            "verdict": self.verdict,
            "stopped": self.stopped,
            "left": self.left,
            "logbook": None
            if self.book is None
            else {"operations": self.book.operations, "hot_openings": self.book.hot_openings},
            "steps": [found.content() for found in self.steps],
            "guards": guard_results(self.steps),
        }


def _text(moment: datetime) -> str:
    return moment.isoformat(timespec="seconds").replace("+00:00", "Z")


def guard_results(steps: list[Findings]) -> list[dict[str, Any]]:
    """A row for each of H1 to H21: by which steps, with what result."""
    return [_guard_row(hazard, steps) for hazard in sorted(GUARDS)]


def _guard_row(hazard: int, steps: list[Findings]) -> dict[str, Any]:
    mine = [found for found in steps if hazard in found.step.hazards]
    results = {found.result for found in mine} - {NOT_APPLICABLE}
    row: dict[str, Any] = {
        "hazard": hazard,
        "name": HAZARDS[hazard][0],
        "steps": [found.step.id for found in mine],
        "reason": "",
        "shown_by": FURTHER.get(hazard, ""),
    }
    if hazard in UNEXERCISED:
        row["result"] = NOT_HERE
        row["reason"], row["shown_by"] = UNEXERCISED[hazard]
    elif any(found.result == FAILED and found.speaks_against(hazard) for found in mine):
        row["result"] = FAILED
    elif results == {PASSED}:
        row["result"] = PASSED
    else:
        row["result"] = NOT_DONE
    if row["result"] in (FAILED, NOT_DONE):
        row["reason"] = "; ".join(
            f"{found.step.id}: {found.reason}" for found in mine if found.result != PASSED
        )
    return row


def prove(tracer: Tracer, operator: Operator) -> ProofTest:
    """Run the whole test. RefusedError, DeviceFaultError, LinkError before it has begun: where
    there is no bench, a fault is latched, a sweep is held, or the source is not absent.
    """
    _demand_ready(tracer)
    bench = Bench(tracer, operator)
    test = ProofTest(tracer, operator.who, datetime.now(UTC))
    test.steps = [Findings(step) for step in STEPS]
    try:
        for found in test.steps:
            operator.tell(_heading(found))
            _run(bench, found)
            operator.tell(_outcome(found))
            if found.result == FAILED and found is test.steps[0]:
                raise _not_absent(found)
            if found.result == FAILED:
                test.verdict = FAILED
                test.stopped = f"after {found.step.id}, {found.step.title}, which failed"
                break
        else:
            test.verdict = PASSED
    except (KeyboardInterrupt, StoppedError) as error:
        test.stopped = f"in {found.step.id}, {found.step.title}: {str(error) or 'by Ctrl-C'}"
    except BaseException:
        # Whatever else goes wrong leaves no contact closed.
        with suppress(KneewiseError):
            bench.session.abort()
        raise
    if test.verdict != PASSED:
        for found in test.steps:
            if found.result == NOT_DONE:
                found.reason = f"the test stopped {test.stopped}"
    test.left = _leave_safe(bench, disconnect=test.verdict != PASSED)
    with suppress(KneewiseError):
        test.book = tracer.logbook()
    test.ended = datetime.now(UTC)
    return test


def _demand_ready(tracer: Tracer) -> None:
    """Before anything is asked."""
    demand(tracer.cautions)
    if tracer.rung == REPLAY:
        raise RefusedError(
            "starting a proof test",
            found="a recording",
            expected="a tracer",
            next_step="name its port with --on",
        )
    if not tracer.profile:
        raise RefusedError(
            "starting a proof test",
            found="H14: no valid profile on the device",
            expected="the profile of this board",
            next_step="store the profile of this board on the device, then prove it",
            guard=14,
        )
    connection = tracer.connection
    connection.session.abort()
    if connection.wait_safe().held_sweep:
        raise RefusedError(
            "starting a proof test",
            found="a sweep that the tracer still holds",
            expected="none: the test's own charges would find no room",
            next_step="fetch it with `kneewise sweep`, then start again",
        )


def _not_absent(found: Findings) -> RefusedError:
    """Nothing has been tested then, and there is nothing to report."""
    return RefusedError(
        "starting a proof test",
        found=found.reason,
        expected="nothing connected to the source terminals, and an empty capacitor",
        next_step="disconnect the source, wait for the bleed, then start again",
    )


def _run(bench: Bench, found: Findings) -> None:
    """One step; what it raises is its result."""
    try:
        found.step.run(bench, found)
        found.conclude()
    except NotForThisBuild as error:
        found.result, found.reason = NOT_APPLICABLE, str(error)
    except KneewiseError as error:
        found.conclude()
        found.result = FAILED
        found.reason = "; ".join(filter(None, (found.reason, str(error))))


def _heading(found: Findings) -> str:
    step = found.step
    few = len(step.hazards) <= FEW
    proves = ", ".join(f"H{n} {HAZARDS[n][0]}" if few else f"H{n}" for n in step.hazards)
    return wrapped(f"{step.id}  ", f"{step.title}{f' ({proves})' if proves else ''}")


def _outcome(found: Findings) -> str:
    lines = [
        f"    {'ok' if value.holds else 'NO':3} {value.name}: {value.said()}"
        + (f" ({value.limits()})" if value.limits() and not value.met else "")
        for value in found.values
    ]
    reason = f": {found.reason}" if found.reason and found.result != FAILED else ""
    return "\n".join([*lines, f"    {found.result}{reason}"])


def _leave_safe(bench: Bench, *, disconnect: bool) -> str:
    """Bring the tracer to its safe state; in words, in what state it is left."""
    with suppress(KneewiseError):
        bench.session.abort()
    if disconnect and bench.supplied:
        try:
            bench.operator.do(Task.DISCONNECT)
        except (KeyboardInterrupt, StoppedError):
            bench.operator.tell("    the supply is still connected")
    return _state(bench.connection)


def _state(connection: Connection) -> str:
    fault = ""
    try:
        connection.session.abort()
        try:
            connection.wait_safe()
        except DeviceFaultError as error:
            fault = f"; {error}"
        status = connection.status()
    except KneewiseError:
        return (
            "the tracer does not answer: pull its power, switch the supply off, measure the "
            "capacitor yourself"
        )
    return (
        f"{status.state}, contact {'closed' if status.contact_closed else 'open'}, "
        f"bleed {'engaged' if status.bleed_engaged else 'released'}, "
        f"{status.capacitor_v:.2f} V on the capacitor{fault}"
    )
