"""The scripted device, but for what each request does: bytes, time, sessions and the prompt.

Comes in: bytes from a host, and the time. Goes out: bytes for it, when they are due. A script's
`Twist` stands between every message and its bytes. What the requests do is in `host_answers.py`.
"""

from __future__ import annotations

import contextlib
import heapq
import random
from collections.abc import Callable
from itertools import count
from typing import Any

from conformance.host_watch import LEFT, LOST, RESET, SHOWN, STARTED, Event, Heard, Said, Watch
from kneewire import catalogue, framing
from kneewire.messages import NO_SESSION, Message, Refused, pack, unpack

REFUSALS = {text: code for code, text in catalogue.REFUSALS.items()}
SAFE, ARMED, CHARGING, BLEEDING = 0, 1, 2, 3
POWER_ON, WATCHDOG = 1, 3
STORED = 8
BOOTED_S = 1.0
BANNER = b'MicroPython v1.0.0; made up by a script\r\nType "help()" for more information.\r\n'
PROMPT = b">>> "


class Twist:
    """What a script changes; this one changes nothing."""

    charge_s = 0.3

    def request(self, device: Conversation, message: Message) -> bool:
        """A request has come; True where the script has dealt with it."""
        return False

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        """What is sent in place of one message; empty where it is lost."""
        return [framing.encode(body, False)]


class Conversation:
    """`hear` takes bytes, `take` gives those that are due, `due` says when the next will be."""

    def __init__(self, twist: Twist) -> None:
        self.twist = twist
        self.watch = Watch()
        self.random = random.Random(1)
        self.now_s = 0.0
        self.good = self.bad = 0
        self._numbers = count()
        self._due: list[tuple[float, int, Callable[[], object]]] = []
        self._out: list[bytes] = []
        self._prompt = False
        self.boot()

    # -- what it is ------------------------------------------------------------------------

    def boot(self) -> None:
        """As after power on."""
        self.boot_nonce = self.random.getrandbits(32)
        self.reset_cause = POWER_ON
        self.state = SAFE
        self.late: list[Heard] = []
        self._due.clear()
        self._boot_s = self.now_s
        self.forget_session()

    def forget_session(self) -> None:
        self.session = NO_SESSION
        self.nonce: int | None = None
        self.begin_session()

    def begin_session(self) -> None:
        self.highest = 0
        self.stored: dict[int, tuple[Message, bytes]] = {}
        self.token = 0

    def reset(self) -> None:
        """By the watchdog."""
        self.boot()
        self.reset_cause = WATCHDOG
        self.watch.log.append(Event(self.now_s, RESET))

    # -- time ------------------------------------------------------------------------------

    def time_us(self) -> int:
        return round((self.now_s - self._boot_s + BOOTED_S) * 1e6)

    def later(self, seconds: float, what: Callable[[], object]) -> None:
        heapq.heappush(self._due, (self.now_s + seconds, next(self._numbers), what))

    def due(self) -> float | None:
        """When something happens next by itself, or None."""
        if self._out:
            return self.now_s
        return self._due[0][0] if self._due else None

    def _pass_until(self, now_s: float) -> None:
        while self._due and self._due[0][0] <= now_s:
            at_s, _, what = heapq.heappop(self._due)
            self.now_s = max(self.now_s, at_s)
            what()
        self.now_s = max(self.now_s, now_s)

    # -- bytes -----------------------------------------------------------------------------

    def note(self, what: str, now_s: float) -> None:
        """Something that is neither heard nor said."""
        self._pass_until(now_s)
        self.watch.log.append(Event(self.now_s, what))

    def take(self, now_s: float) -> bytes:
        """What the host is given now."""
        self._pass_until(now_s)
        data = b"".join(self._out)
        self._out.clear()
        for run in data.split(framing.DELIMITER):
            body = framing.decode_run(run, False) if run else b""
            if body and not isinstance(body, framing.Bad):
                self._said(body)
        return data

    def _said(self, body: bytes) -> None:
        with contextlib.suppress(Refused):  # a kind that nobody knows, on purpose
            self.watch.log.append(Said(self.now_s, unpack(body)))

    def hear(self, data: bytes, now_s: float) -> None:
        self._pass_until(now_s)
        for entry in self.watch.feed(data, self.now_s):
            if isinstance(entry, Event):
                self._control(entry)
            elif self._prompt:
                # The echo of a comment.
                self.say(b"#" + bytes(byte for byte in entry.body if 32 <= byte < 127))
            else:
                self._run(entry)

    def say(self, raw: bytes) -> None:
        self._out.append(raw)

    # -- the prompt ------------------------------------------------------------------------

    def show_prompt(self, before: bytes = b"") -> None:
        """The firmware has ended: contact open, bleed engaged, nothing forgotten."""
        self._prompt = True
        self.token = 0
        self.state = SAFE
        self.late.clear()
        self._due.clear()
        self.say(before + BANNER + PROMPT)
        self.watch.log.append(Event(self.now_s, SHOWN))

    def _control(self, event: Event) -> None:
        """A bare control byte is noted and no more, so that the script can go on."""
        if event.what == LEFT:
            self._prompt = True
            self.say(b"\r\n" + BANNER + PROMPT)
        elif event.what == STARTED and self._prompt:
            self._prompt = False
            self.say(b"from tracer import app; app.main()\r\n")

    # -- requests --------------------------------------------------------------------------

    def _run(self, heard: Heard) -> None:
        if heard.body:
            self.good += 1
            self.answer(heard)
        else:
            self.bad += 1

    def answer(self, heard: Heard) -> None:
        """Answer one request as SPEC.md says, unless the script has."""
        message = heard.message
        if self.state == CHARGING:
            if message is not None and (message.name, message.session) == ("abort", self.session):
                self.abort_charge()
            else:
                self.late.append(heard)
                return
        if message is None:
            self._refuse_unread(heard.body)
            return
        if self.twist.request(self, message):
            return
        _, way, frozen, changes, _ = catalogue.MESSAGES[catalogue.KINDS[message.name]]
        if way != catalogue.TO_DEVICE:
            self.refuse(message, "unknown kind")
        elif not frozen and message.name != "abort" and message.session != self.session:
            self.refuse(message, "unknown session")
        elif not changes or message.name == "abort":
            self.carry_out(message)
        elif message.sequence in self.stored:
            self.send(*self.stored[message.sequence])
        elif message.sequence <= self.highest:
            self.refuse(message, "stale")
        else:
            self.highest = message.sequence
            self.carry_out(message)

    def carry_out(self, message: Message) -> None:
        raise NotImplementedError

    def abort_charge(self) -> None:
        raise NotImplementedError

    def raw_count(self) -> int:
        """Raw pairs in the held sweep."""
        raise NotImplementedError

    def _refuse_unread(self, body: bytes) -> None:
        kind, text = body[0], "malformed" if body[0] in catalogue.MESSAGES else "unknown kind"
        whole = len(body) >= 9
        session = int.from_bytes(body[1:5], "little") if whole else 0
        sequence = int.from_bytes(body[5:9], "little") if whole else 0
        self._refuse(kind, session, sequence, text, 0)

    def refuse(self, request: Message, text: str, guard: int = 0) -> None:
        kind = catalogue.KINDS[request.name]
        message, body = self._refuse(kind, request.session, request.sequence, text, guard)
        self._store(request, message, body)

    def _refuse(
        self, kind: int, session: int, sequence: int, text: str, guard: int
    ) -> tuple[Message, bytes]:
        values = {"of_kind": kind, "code": REFUSALS[text], "guard": guard}
        values |= {"measured": 0, "limit": 0, "unit": 0}
        body = pack("refusal", session, sequence, values)
        message = Message("refusal", session, sequence, values)
        self.send(message, body)
        return message, body

    def reply(self, request: Message, **values: Any) -> None:
        kind = catalogue.KINDS[request.name] | catalogue.REPLY
        name = catalogue.MESSAGES[kind][0]
        session = self.session if request.name == "hello" else request.session
        message = Message(name, session, request.sequence, values)
        body = pack(name, session, request.sequence, values)
        self._store(request, message, body)
        self.send(message, body)

    def _store(self, request: Message, message: Message, body: bytes) -> None:
        changes = catalogue.MESSAGES[catalogue.KINDS[request.name]][3]
        if changes and request.sequence == self.highest:
            self.stored[request.sequence] = (message, body)
            while len(self.stored) > STORED:
                del self.stored[min(self.stored)]

    def notice(self, name: str, sequence: int = 0, **values: Any) -> None:
        """A message that is no reply."""
        body = pack(name, self.session, sequence, values)
        self.send(Message(name, self.session, sequence, values), body)

    def send(self, message: Message, body: bytes) -> None:
        """Through the script."""
        pieces = self.twist.outgoing(self, message, body)
        if not pieces:
            self.watch.log.append(Event(self.now_s, LOST, message=message))
        for piece in pieces:
            self.say(piece)
