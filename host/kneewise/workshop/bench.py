"""The tracer at the bench, for the steps of a proof test: arm, fire, charge, ask the operator.

Comes in: an open tracer and an operator. Goes out: what a charge left behind, and refusals as
findings. The contact closes here by arm and fire alone, under the firmware's own guards.
"""

from __future__ import annotations

import secrets
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from kneewire import catalogue
from kneewire.messages import Message
from kneewise.errors import DeviceFaultError, RefusedError
from kneewise.instrument.arming import Asked, arm
from kneewise.instrument.bled import wait_bled
from kneewise.instrument.full_rate import Window
from kneewise.instrument.hands import Reading, Task
from kneewise.instrument.profile import Scales
from kneewise.instrument.status import Status
from kneewise.instrument.sweep import fetch, fetch_raw
from kneewise.instrument.sweeping import Sweeping
from kneewise.instrument.trace import Floats
from kneewise.instrument.tracer import Tracer
from kneewise.workshop.evidence import Findings, StoppedError
from kneewise.workshop.operator import READINGS, UNITS, Operator, series_ohm, words_of

KNOTS = 64
BARE_RELAY = 2  # of CONTACTS
LIMIT_S = 1.0  # of a closed contact, at the least
TAUS = 10  # that a charge through the supply's resistor may last; after 7 it is complete


@dataclass(frozen=True, slots=True)
class Charged:
    """What one charge left behind. Times in device microseconds since boot."""

    manifest: Message
    end_reason: str
    charge_c: float
    """What flowed through the shunt."""
    current_a: Floats
    """Of each pair kept one by one, from conduction on."""
    status: Status
    """The first that was no longer bleeding."""
    fault: DeviceFaultError | None

    @property
    def ended_us(self) -> float:
        """The last pair of the capture."""
        values = self.manifest.values
        return float(values["conducting_us"] + values["pairs"] * values["pair_ns"] / 1000)


class Bench:
    """`supply_v`, `supply_a`: as the operator said them; `peak_a` as the sweep has shown it."""

    def __init__(self, tracer: Tracer, operator: Operator) -> None:
        self.tracer = tracer
        self.operator = operator
        self.connection = tracer.connection
        self.session = tracer.connection.session
        self.profile = tracer.profile
        self.scales = Scales.of(tracer.profile)
        self.supply_v = 0.0
        self.supply_a = 0.0
        self.peak_a = 0.0
        self.supplied = False
        """True while the bench supply is connected."""

    @property
    def finer(self) -> int:
        """Codes of V and I that make one of 12 bits."""
        return (self.scales.code_max + 1) // 4096

    @property
    def near_zero_a(self) -> float:
        """An opening below is cold; as the firmware reckons it."""
        rated_a = self.profile["rated_ma"] / 1000
        least_a = 3 * self.finer * self.scales.current_a_per_code
        return max(float(rated_a * self.profile["near_zero_permyriad"] / 1e4), least_a)

    @property
    def bare(self) -> bool:
        """True for a relay without a switch in series."""
        return bool(self.profile["contact"] == BARE_RELAY)

    @property
    def may_break(self) -> bool:
        """True where the contact may open under load."""
        return not self.bare or bool(self.profile["breaks_dc"])

    # -- the operator --------------------------------------------------------------------

    def ask(self, found: Findings, task: Task, **values: float) -> None:
        """Have something done."""
        found.asked.append(words_of(task, values))
        self.operator.do(task, **values)
        if task in (Task.CONNECT_SUPPLY, Task.DISCONNECT):
            self.supplied = task == Task.CONNECT_SUPPLY

    def read(self, found: Findings, reading: Reading, low: float, high: float) -> float:
        """Have something read off."""
        found.asked.append(f"{READINGS[reading]} ({low:g} to {high:g} {UNITS[reading]})")
        return self.operator.number(reading, low, high)

    def confirm(self, found: Findings, statement: str) -> None:
        """StoppedError where it is not so."""
        found.asked.append(statement)
        if not self.operator.confirm(statement):
            raise StoppedError(f"the operator did not confirm: {statement}")

    # -- the tracer ----------------------------------------------------------------------

    def sleep(self, seconds: float) -> None:
        """Let time pass on the link's clock."""
        self.session.port.sleep(seconds)

    def arm(
        self,
        exercise: str,
        *,
        confirmed: bool = True,
        pairs: int = 0,
        limit_v: float | None = None,
        limit_a: float | None = None,
    ) -> int:
        """A token. `pairs`: kept one by one, fewer where the device's memory is short."""
        asked = Asked(
            knots=KNOTS,
            limit_s=self._limit_s(),
            exercise=exercise,
            limit_v=limit_v,
            limit_a=limit_a,
        )
        token, _ = arm(self.session, asked, Window(0, pairs, shrinks=True), confirmed)
        return token

    def disarm(self) -> Status:
        """Take an arming back; the state then."""
        self.session.abort()
        return self.connection.wait_safe()

    def _limit_s(self) -> float:
        """Longest closed time."""
        if not self.supplied:
            return LIMIT_S
        percent: int = self.profile["capacitance_high_percent"]
        largest_f = self.scales.capacitance_f * percent / 100
        return max(LIMIT_S, TAUS * largest_f * series_ohm(self.supply_v, self.supply_a))

    def fire(self, token: int) -> float:
        """The request alone, under a sweep id of its own; how long to be quiet, s."""
        values = {"token": token, "sweep_id": secrets.token_bytes(16)}
        return float(self.session.request("fire", values)["quiet_ms"]) / 1000

    def operations(self) -> tuple[int, int]:
        """Closings and hot openings so far."""
        book = self.tracer.logbook()
        return book.operations, book.hot_openings

    def charge(self, exercise: str, *, pairs: int = 0, limit_a: float | None = None) -> Charged:
        """A whole charge: armed, fired once, bled, fetched, and forgotten by the device."""
        connection, session = self.connection, self.session
        connection.wait_safe()
        token = self.arm(exercise, pairs=pairs, limit_a=limit_a)
        sweep_id = secrets.token_bytes(16)
        Sweeping(connection, self.tracer.rung).fire(token, sweep_id, lambda stage: None)
        status, fault = wait_bled(session, self.profile)
        manifest = session.request("read_manifest")
        knots = fetch(session, manifest).knots()
        raw = fetch_raw(session, manifest)
        session.request("acknowledge", {"sweep_id": sweep_id})
        values = manifest.values
        zero_code = values["current_sum"] / values["conversions"]
        codes = float(knots.current_sum.sum()) - zero_code * float(knots.pairs.sum())
        ampere = self.scales.current_a_per_code
        return Charged(
            manifest=manifest,
            end_reason=catalogue.END_REASONS.get(values["end_reason"], str(values["end_reason"])),
            charge_c=codes * ampere * values["pair_ns"] * 1e-9,
            current_a=(raw.current.astype(np.float64) - zero_code) * ampere,
            status=status,
            fault=fault,
        )


def refusal(action: Callable[[], object]) -> RefusedError | None:
    """What `action` was refused for; None where it was granted."""
    try:
        action()
    except RefusedError as error:
        return error
    return None


def ended(found: Findings, charged: Charged, end_reason: str) -> bool:
    """Note how a charge ended, and what it latched; True where it is as wanted."""
    of = (charged.fault.guard,) if charged.fault is not None else ()
    found.word("charge ended", charged.end_reason, end_reason, of)
    found.word("fault", charged.fault.found if charged.fault is not None else "none", "none", of)
    return charged.fault is None and charged.end_reason == end_reason


def guard_of(error: RefusedError | DeviceFaultError | None) -> str:
    """ "H4", the refusal's own words, or "none"."""
    if error is None:
        return "none"
    return f"H{error.guard}" if error.guard else error.found
