"""Devices that break one clause each: the firmware, with one thing changed.

`WRONG_DEVICES` has for each the clauses that a checker must find broken, and no others, and a
function that makes the change through pytest's monkeypatch.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest

from kneewire import catalogue, framing
from kneewise.emulator import inprocess
from kneewise.emulator.firmware import firmware_module

Patch = pytest.MonkeyPatch
Wrong = Callable[[Patch], object]

FIFO, GIVE_UP_US = 256, 500_000  # bytes that the RP2 port takes unread, and its patience
service = firmware_module("tracer.service")
states = firmware_module("tracer.sequencer")
loop = firmware_module("tracer.loop")
held = firmware_module("tracer.held")
ear = firmware_module("tracer.ear")
Service = service.Service
WRONG_DEVICES: list[tuple[set[str], Wrong]] = []


class SlowPort(inprocess._Link):
    """As the RP2 port: a write waits for the host to read, and gives up after 500 ms."""

    def write(self, data: bytes) -> int:
        owner, written, waited_us = self._owner, 0, 0
        while written < len(data) and waited_us < GIVE_UP_US:
            room = FIFO - len(owner._to_host)
            if room > 0:
                owner.put_output(bytes(data[written : written + room]))
                written, waited_us = min(written + room, len(data)), 0
                continue
            owner.hand_over()
            if len(owner._to_host) >= FIFO:
                step_us = max(min(10_000, owner.host_left_us()), 1)
                owner.board.wait(step_us)
                waited_us += step_us
        return written


def breaks(*names: str) -> Callable[[Wrong], Wrong]:
    def add(wrong: Wrong) -> Wrong:
        WRONG_DEVICES.append((set(names), wrong))
        return wrong

    return add


def handler(patch: Patch, name: str, change: Callable[..., Any]) -> None:
    """Let `name` be handled by change(original, service, request)."""
    original = service.HANDLERS[name]
    patch.setitem(service.HANDLERS, name, lambda self, request: change(original, self, request))


def replies(patch: Patch, name: str, **values: Any) -> None:
    """The reply to `name` has other values; a function is given the service and the reply."""

    def change(original: Any, self: Any, request: Any) -> Any:
        reply = original(self, request)
        made = {
            key: value(self, reply) if callable(value) else value for key, value in values.items()
        }
        return {**reply, **made}

    handler(patch, name, change)


# -- frames and bodies -------------------------------------------------------------------------


@breaks("F3", "F8")
def takes_short_frames_alone(patch: Patch) -> None:
    patch.setattr(framing, "coded_limit", lambda size, toward_device: 300)


@breaks("F5")
def takes_bare_control_bytes(patch: Patch) -> None:
    original = framing.decode_run

    def decode(run: bytes, toward_device: bool) -> Any:
        for byte in (1, 3, 4, 5) if toward_device else ():
            run = run.replace(bytes([byte]), bytes([2, 0x40 + byte]))
        return original(run, toward_device)

    patch.setattr(framing, "decode_run", decode)


@breaks("F5", "F6", "F8")
def answers_what_is_no_frame(patch: Patch) -> None:
    original = framing.Decoder.feed

    def feed(self: framing.Decoder, data: bytes) -> Any:
        found = original(self, data)
        if not self.toward_device:
            return found
        return [b"" if isinstance(item, framing.Bad) else item for item in found]

    patch.setattr(framing.Decoder, "feed", feed)


@breaks("F7", "C3")
def counts_guards_as_bad(patch: Patch) -> None:
    original = framing.Decoder.feed

    def feed(self: framing.Decoder, data: bytes) -> Any:
        self.bad += self.toward_device and data == framing.GUARD
        return original(self, data)

    patch.setattr(framing.Decoder, "feed", feed)


@breaks("F9")
def drops_the_delimiter_after_a_short_write(patch: Patch) -> None:
    def send(self: Any, frame: bytes) -> bool:
        return bool(self.hal.link_write(frame) == len(frame))

    patch.setattr(Service, "send", send)
    patch.setattr(inprocess, "_Link", SlowPort)


@breaks("B3")
def numbers_its_notices(patch: Patch) -> None:
    original = Service.send_message

    def send(self: Any, name: str, sequence: int, values: Any) -> Any:
        return original(self, name, 5 if name == "bleed_ended" else sequence, values)

    patch.setattr(Service, "send_message", send)


@breaks("B4")
def does_not_answer_clear_fault(patch: Patch) -> None:
    original = Service.handle

    def handle(self: Any, body: bytes) -> None:
        session = int.from_bytes(body[1:5], "little")
        if body[0] != catalogue.KINDS["clear_fault"] or session != self.session:
            original(self, body)

    patch.setattr(Service, "handle", handle)


@breaks("B5")
def calls_an_unknown_kind_malformed(patch: Patch) -> None:
    original = Service._refuse

    def refuse(self: Any, kind: int, session: int, sequence: int, code: int) -> None:
        original(self, kind, session, sequence, 2 if code == 1 else code)

    patch.setattr(Service, "_refuse", refuse)


@breaks("B7", "W1")
def arms_for_fewer_knots_than_allowed(patch: Patch) -> None:
    patch.setattr(service, "MIN_KNOTS", 15)


# -- hello and sessions ------------------------------------------------------------------------


@breaks("H1")
def does_not_greet_while_armed(patch: Patch) -> None:
    original = Service.handle

    def handle(self: Any, body: bytes) -> None:
        if body[0] != catalogue.KINDS["hello"] or self.sequencer.state != states.ARMED:
            original(self, body)

    patch.setattr(Service, "handle", handle)


@breaks("H2", "R3")
def begins_a_session_with_every_hello(patch: Patch) -> None:
    def hello(original: Any, self: Any, request: Any) -> Any:
        self.host_nonce = None
        return original(self, request)

    handler(patch, "hello", hello)


@breaks("H3")
def ignores_other_versions(patch: Patch) -> None:
    original = Service.handle

    def handle(self: Any, body: bytes) -> None:
        fingerprint = int.from_bytes(body[13:17], "little")
        whole = body[0] == catalogue.KINDS["hello"] and len(body) >= 19
        if not whole or fingerprint == self.fingerprint:
            original(self, body)

    patch.setattr(Service, "handle", handle)


@breaks("S2")
def answers_a_repeat_differently(patch: Patch) -> None:
    def other(frame: bytes) -> bytes:
        body = framing.decode_run(bytes(frame[:-1]), False)
        assert isinstance(body, bytes)
        return framing.encode(body[:-1] + bytes([body[-1] ^ 1]), False)

    class Stored(list[Any]):
        def __iter__(self) -> Any:
            return iter([(sequence, other(frame)) for sequence, frame in super().__iter__()])

    def put(self: Any, value: list[Any]) -> None:
        self.__dict__["stored"] = Stored(value)

    patch.setattr(Service, "stored", property(lambda self: self.__dict__["stored"], put), False)


@breaks("S2")
def carries_a_repeat_out_again(patch: Patch) -> None:
    """With the same answer: only what it does shows."""
    original = Service.handle

    def handle(self: Any, body: bytes) -> None:
        again = [
            frame for number, frame in self.stored if number == body[5] and body[6:9] == bytes(3)
        ]
        original(self, body)
        if again and body[0] == catalogue.KINDS["arm"] and self.sequencer.state == states.SAFE:
            self.sequencer.event(states.EV_ARM)
            self.sequencer.armed_until_us = self.hal.now_us() + 1000000

    patch.setattr(Service, "handle", handle)


@breaks("H4", "R3")
def draws_a_boot_nonce_for_every_hello(patch: Patch) -> None:
    replies(patch, "hello", boot_nonce=lambda self, reply: self.hal.random32())


@breaks("S3")
def calls_stale_wrong_state(patch: Patch) -> None:
    patch.setattr(service, "R_STALE", service.R_WRONG_STATE)


@breaks("S5")
def reads_manifests_in_any_session(patch: Patch) -> None:
    original = Service.handle

    def handle(self: Any, body: bytes) -> None:
        if body[0] == catalogue.KINDS["read_manifest"]:
            body = body[:1] + self.session.to_bytes(4, "little") + body[5:]
        original(self, body)

    patch.setattr(Service, "handle", handle)


# -- sweeps ------------------------------------------------------------------------------------


@breaks("W1")
def names_no_guard(patch: Patch) -> None:
    original = Service._refusal_frame

    def frame(self: Any, *header: Any) -> Any:
        return original(self, *header[:4])

    patch.setattr(Service, "_refusal_frame", frame)


@breaks("W2")
def grants_one_token_again_and_again(patch: Patch) -> None:
    def arm(original: Any, self: Any, request: Any) -> Any:
        reply = {**original(self, request), "token": 77}
        self.sequencer.token = 77
        return reply

    handler(patch, "arm", arm)


@breaks("W2")
def lets_no_token_expire(patch: Patch) -> None:
    def arm(original: Any, self: Any, request: Any) -> Any:
        reply = original(self, request)
        self.sequencer.armed_until_us += 10_000_000
        return reply

    handler(patch, "arm", arm)


@breaks("W3")
def accepts_a_used_token(patch: Patch) -> None:
    def fire(original: Any, self: Any, request: Any) -> Any:
        sequencer = self.sequencer
        token, armed = sequencer.token, sequencer.state == states.ARMED
        try:
            return original(self, request)
        except service.Refusal:
            if armed:
                sequencer.event(states.EV_ARM)
                sequencer.token = token
            raise

    handler(patch, "fire", fire)


@breaks("W4")
def closes_again_for_a_repeated_fire(patch: Patch) -> None:
    original = Service.handle

    def handle(self: Any, body: bytes) -> None:
        sequence = int.from_bytes(body[5:9], "little")
        again = any(number == sequence for number, _ in self.stored)
        original(self, body)
        if again and body[0] == catalogue.KINDS["fire"] and self.sequencer.state == states.SAFE:
            self.sequencer.event(states.EV_ARM)
            self.fired = body[13:29]

    patch.setattr(Service, "handle", handle)


@breaks("W5")
def replies_to_fire_when_all_is_over(patch: Patch) -> None:
    original, late = Service.send, []

    def send(self: Any, frame: bytes) -> Any:
        if self.fired is not None:
            late.append(frame)
            return True
        sent = original(self, frame)
        while late:
            original(self, late.pop())
        return sent

    patch.setattr(Service, "send", send)


@breaks("W6")
def talks_while_charging(patch: Patch) -> None:
    original = loop.Loop.charge

    def charge(self: Any, sweep_id: bytes) -> None:
        self.service.send_message("fetch_reply", 9, {"first": 0, "count": 0})
        original(self, sweep_id)

    patch.setattr(loop.Loop, "charge", charge)


@breaks("W8")
def tells_another_reason(patch: Patch) -> None:
    original = Service.charge_ended
    patch.setattr(Service, "charge_ended", lambda self, sweep_id, end: original(self, sweep_id, 2))


@breaks("W9")
def arms_while_a_sweep_is_held(patch: Patch) -> None:
    def arm(original: Any, self: Any, request: Any) -> Any:
        kept, self.held.sweep_id = self.held.sweep_id, held.NO_ID
        try:
            return original(self, request)
        finally:
            self.held.sweep_id = kept

    handler(patch, "arm", arm)


@breaks("W10")
def frees_for_any_id(patch: Patch) -> None:
    def acknowledge(original: Any, self: Any, request: Any) -> Any:
        request.values["sweep_id"] = self.held.sweep_id
        return original(self, request)

    handler(patch, "acknowledge", acknowledge)


@breaks("W11", "K7")
def sends_more_than_its_window(patch: Patch) -> None:
    replies(patch, "hello", window=8)


@breaks("A2")
def heeds_the_abort_of_any_session(patch: Patch) -> None:
    def aborted(self: Any) -> bool:
        bodies = [framing.decode_run(run, True) for run in self.kept().split(framing.DELIMITER)]
        return any(body[:1] == b"\x04" for body in bodies if isinstance(body, bytes))

    patch.setattr(ear.Ear, "aborted", property(aborted, lambda self, value: None), False)


@breaks("W6", "A1")
def heeds_no_abort_in_a_charge(patch: Patch) -> None:
    patch.setattr(Service, "abort_frame", lambda self: b"")


@breaks("A3")
def stays_armed_for_a_foreign_abort(patch: Patch) -> None:
    original = Service._abort

    def abort(self: Any, request: Any) -> Any:
        own = request.session == self.session
        return original(self, request) if own else {"state": self.sequencer.state}

    patch.setattr(Service, "_abort", abort)


# -- the rest ------------------------------------------------------------------------------------


@breaks("R3")
def forgets_its_answers_at_the_prompt(patch: Patch) -> None:
    original = loop.Loop.leave

    def leave(self: Any) -> None:
        original(self)
        self.service.stored = []

    patch.setattr(loop.Loop, "leave", leave)


@breaks("R4", "W9")
def forgets_its_sweep_at_the_prompt(patch: Patch) -> None:
    original = loop.Loop.leave

    def leave(self: Any) -> None:
        original(self)
        self.held.manifest = {**self.held.manifest, "knots_crc": 0} if self.held.manifest else {}

    patch.setattr(loop.Loop, "leave", leave)


@breaks("R5")
def does_not_leave_for_the_prompt(patch: Patch) -> None:
    replies(patch, "prompt", leaving=0)


@breaks("C3")
def counts_no_bad_frames(patch: Patch) -> None:
    replies(patch, "status", frames_bad=0)


@breaks("T1")
def opens_before_it_closes(patch: Patch) -> None:
    replies(patch, "read_manifest", opened_us=7)


@breaks("T2")
def stamps_backwards(patch: Patch) -> None:
    replies(patch, "heartbeat", received_us=lambda self, reply: reply["replied_us"] + 1)
