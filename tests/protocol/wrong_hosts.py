"""Hosts that break one clause each: Kneewise, with one thing changed.

`WRONG_HOSTS` has for each the clauses that a checker must find broken, and no others, and a
function that makes the change through pytest's monkeypatch.
"""

from __future__ import annotations

from collections.abc import Callable
from contextlib import suppress
from typing import Any

import pytest

from conformance.host_run import Loopback
from kneewire import framing
from kneewire.messages import KNOTS_A_BLOCK, Refused, pack, unpack
from kneewise.errors import OutcomeUnknownError, ProtocolError, RefusedError
from kneewise.instrument import sweep as sweep_module
from kneewise.instrument.sweeping import Sweeping
from kneewise.link import session as session_module
from kneewise.link.session import Session

Patch = pytest.MonkeyPatch
Wrong = Callable[[Patch], object]
WRONG_HOSTS: list[tuple[set[str], Wrong]] = []


def breaks(*names: str) -> Callable[[Wrong], Wrong]:
    def add(wrong: Wrong) -> Wrong:
        WRONG_HOSTS.append((set(names), wrong))
        return wrong

    return add


def written(patch: Patch, change: Callable[[bytes], bytes]) -> None:
    """All that the host writes goes through `change`."""
    original = Loopback.write
    patch.setattr(Loopback, "write", lambda self, data: original(self, change(data)))


@breaks("F4")
def sends_a_bare_03(patch: Patch) -> None:
    written(patch, lambda data: b"\x03" + data)


@breaks("R1")
def sends_no_guard(patch: Patch) -> None:
    written(patch, lambda data: data.replace(framing.GUARD, b"", 1))


@breaks("H5")
def draws_any_nonce(patch: Patch) -> None:
    patch.setattr(session_module, "quiet_nonce", lambda: 0x01020304)


@breaks("W14")
def fires_twice(patch: Patch) -> None:
    original = Sweeping.sweep

    def sweep(self: Any, *given: Any) -> Any:
        try:
            return original(self, *given)
        except OutcomeUnknownError:
            return original(self, *given)

    patch.setattr(Sweeping, "sweep", sweep)


@breaks("W3")
def fires_a_spent_token(patch: Patch) -> None:
    original = Sweeping.fire

    def fire(self: Any, *given: Any) -> None:
        try:
            original(self, *given)
        except RefusedError:
            original(self, *given)

    patch.setattr(Sweeping, "fire", fire)


@breaks("S6")
def repeats_with_other_bytes(patch: Patch) -> None:
    original = Session._send

    def send(self: Any, body: bytes, *, again: bool = False, nudge: bytes = b"") -> None:
        message = unpack(body)
        if again and message.name == "arm":
            values = {**message.values, "knots": 17}
            body = pack("arm", message.session, message.sequence, values)
        original(self, body, again=again, nudge=nudge)

    patch.setattr(Session, "_send", send)


@breaks("W5")
def asks_while_charging(patch: Patch) -> None:
    original = Session.beat

    def beat(self: Any) -> None:
        original(self)
        self._send(self._next("status", None))

    patch.setattr(Session, "beat", beat)


@breaks("W7")
def keeps_silent_while_charging(patch: Patch) -> None:
    patch.setattr(Session, "beat", lambda self: None)


@breaks("C2")
def asks_for_more_than_the_window(patch: Patch) -> None:
    def fetch(session: Session, reassembly: Any, first: int, count: int, a_block: int) -> None:
        wanted = {"sweep_id": reassembly.manifest["sweep_id"], "first": first, "count": count}
        values = {**wanted, "a_block": min(a_block, KNOTS_A_BLOCK - 1)}
        session.burst(reassembly.wanted.request, values, reassembly.take)

    patch.setattr(sweep_module, "_fetch_run", fetch)


def believes(patch: Patch, wanted: sweep_module.Wanted) -> None:
    original = sweep_module.Reassembly.crc_ok
    patch.setattr(
        sweep_module.Reassembly, "crc_ok", lambda self: self.wanted is wanted or original(self)
    )


@breaks("W12")
def believes_any_knots(patch: Patch) -> None:
    believes(patch, sweep_module.KNOTS)


@breaks("K8")
def believes_any_raw_pairs(patch: Patch) -> None:
    believes(patch, sweep_module.RAW_PAIRS)


@breaks("K8")
def takes_raw_pairs_beyond_the_count(patch: Patch) -> None:
    original = sweep_module.Reassembly.take

    def take(self: Any, block: Any) -> None:
        if block.name == "raw_block" and block["first"] == self.count:
            self._records += block["data"]
        original(self, block)

    patch.setattr(sweep_module.Reassembly, "take", take)


@breaks("B6")
def takes_the_raw_pairs_of_any_fetch(patch: Patch) -> None:
    original = Session._pump

    def pump(self: Any, timeout_s: float) -> Any:
        found = original(self, timeout_s)
        for message in found:
            if message.name == "raw_block":
                message.sequence = self.sequence
        return found

    patch.setattr(Session, "_pump", pump)


@breaks("K7")
def asks_for_raw_pairs_that_there_are_not(patch: Patch) -> None:
    original = Session.burst

    def burst(self: Any, name: str, values: Any, *given: Any) -> bool:
        if name == "fetch_raw":
            with suppress(RefusedError):
                original(self, name, {**values, "first": 65000, "count": 1}, *given)
        return original(self, name, values, *given)

    patch.setattr(Session, "burst", burst)


@breaks("K5")
def asks_for_raw_pairs_out_of_range(patch: Patch) -> None:
    original = Session.request

    def request(self: Any, name: str, values: Any = None, **given: Any) -> Any:
        if name == "arm":
            with suppress(RefusedError):
                original(self, name, {**values, "raw_pairs": 2049})
        return original(self, name, values, **given)

    patch.setattr(Session, "request", request)


@breaks("B6")
def gives_up_at_an_unknown_kind(patch: Patch) -> None:
    def strict(body: bytes) -> Any:
        try:
            return unpack(body)
        except Refused as error:
            raise ProtocolError("", found="", expected="", next_step="") from error

    patch.setattr(session_module, "unpack", strict)


@breaks("V2", "V3")
def talks_to_any_version(patch: Patch) -> None:
    patch.setattr(Session, "_check_version", lambda self, reply: None)


@breaks("R2", "R3")
def sees_no_prompt(patch: Patch) -> None:
    patch.setattr(Session, "_at_prompt", lambda self: False)


@breaks("T2")
def probes_in_a_burst(patch: Patch) -> None:
    original = Session.burst

    def burst(self: Any, name: str, values: Any, on_block: Any, *given: Any) -> bool:
        def probe(block: Any) -> None:
            on_block(block)
            self._send(pack("heartbeat", self.session, 0x7777))

        return original(self, name, values, probe, *given)

    patch.setattr(Session, "burst", burst)


@breaks("A2")
def numbers_its_aborts(patch: Patch) -> None:
    original = Session.abort

    def abort(self: Any) -> None:
        original(self)
        self._send(pack("abort", self.session, 5))

    patch.setattr(Session, "abort", abort)
