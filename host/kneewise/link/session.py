"""One session with a device: requests with one deadline each, replies, notices, blocks.

The thread that calls owns the port. A request is sent again, with the same sequence, while its
reply is missing; the device acts on it once. Where a MicroPython prompt answers in the
firmware's place, the firmware is started again by one line, without a reset: what it held is
still held, and the session goes on.
"""

from __future__ import annotations

import logging
import random
from collections import deque
from collections.abc import Callable
from typing import Any
from zlib import crc32

from kneewire import PROTOCOL, catalogue, framing
from kneewire.messages import NO_SESSION, Message, Refused, fingerprint, pack, unpack
from kneewise.errors import LinkError, ProtocolError
from kneewise.link.frames import FrameLog
from kneewise.link.port import Port
from kneewise.link.refusals import impossible_hello, other_version, refused, silent, traceback_in

log = logging.getLogger(__name__)
log.addHandler(logging.NullHandler())

# A prompt shows itself, or echoes what it is sent: the sequence of a hello.
PROMPT_SIGNS = (">>>", "raw REPL", "MicroPython v", "HiKne")
# Ends a line, a block, a raw prompt; then starts what main.py starts. With the firmware's
# modules loaded already, it goes on where it was.
LEAVE_LINE = b"\r\x03\x03\x02"
START_LINE = b"from tracer import app; app.main()\r"
RUN_BYTES = 4096  # far more than a frame: a whole traceback is to be shown
TEXT_CHARACTERS = 8192
HELLO_S = 3.0
REQUEST_S = 6.0
RESCUE_S = 8.0
AGAIN_S = 0.15
PROMPT_S = 0.3
BEAT_S = 0.5
# After so many tries something is sent along to make a prompt show itself: the end of a line and
# of a raw prompt. A hello shows a plain prompt by its echo, and must not run a line there.
NUDGE_AFTER = 3
NUDGE = b"\r\x02" + framing.DELIMITER
HELLO_NUDGE = b"\x02" + framing.DELIMITER
BLOCKS = {"fetch": "block", "fetch_raw": "raw_block"}  # by the request that they answer
SMALL_FRAME = 64  # bytes of body and CRC that any device takes; hello tells the rest
# Bytes of a hello that mean nothing to a MicroPython prompt (see the catalogue).
HELLO_SEQUENCE = int.from_bytes(b"iKne", "little")
LETTERS = b"abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ"


def hello_body(host_nonce: int) -> bytes:
    """The body of this host's hello."""
    values = {
        "major": PROTOCOL[0],
        "minor": PROTOCOL[1],
        "fingerprint": fingerprint(),
        "host_nonce": host_nonce,
    }
    return pack("hello", NO_SESSION, HELLO_SEQUENCE, values)


def quiet_nonce() -> int:
    """A nonce of letters whose hello has no control byte in its CRC, where a prompt would act."""
    while True:
        nonce = int.from_bytes(bytes(random.SystemRandom().choices(LETTERS, k=4)), "little")
        crc = crc32(hello_body(nonce)).to_bytes(4, "little")
        if all(32 <= byte < 127 or byte >= 128 for byte in crc):
            return nonce


class Session:
    """Speaks with one device over one port; `hello` comes first."""

    def __init__(self, port: Port, *, host_nonce: int | None = None) -> None:
        self.port = port
        self.host_nonce = quiet_nonce() if host_nonce is None else host_nonce
        self.session = NO_SESSION
        self.sequence = 0
        self.device: dict[str, Any] = {}
        self.notices: deque[Message] = deque(maxlen=64)
        self.frames = FrameLog()
        self.text = ""
        """What came outside frames since the last rescue, its end at least."""
        self.tracebacks: deque[str] = deque(maxlen=4)
        self._beats: set[int] = set()
        self._beat_answered = False
        self._decoder = framing.Decoder(RUN_BYTES, toward_device=False)

    @property
    def frames_bad(self) -> int:
        """Damaged frames from the device."""
        return self.frames.counters.bad

    def take_over(self, port: Port) -> None:
        """Go on over another port, after the link was lost. `hello` must follow."""
        self.port = port
        self.text = ""
        self._decoder = framing.Decoder(RUN_BYTES, toward_device=False)

    def hello(self, deadline_s: float = HELLO_S) -> dict[str, Any]:
        """Open or resume the session; the device's answer. ProtocolError, LinkError."""
        return self._greet(deadline_s, rescues=1)

    def request(
        self,
        name: str,
        values: dict[str, Any] | None = None,
        *,
        deadline_s: float = REQUEST_S,
        again_s: float = AGAIN_S,
    ) -> Message:
        """Send a request and return its reply.

        Raises RefusedError where the device refuses, LinkError where no reply comes in time,
        ProtocolError where something else answers.
        """
        body = self._next(name, values)
        return self._converse(name, self.sequence, body, deadline_s, again_s)

    def burst(
        self,
        name: str,
        values: dict[str, Any],
        on_block: Callable[[Message], None],
        idle_s: float = AGAIN_S,
    ) -> bool:
        """One `fetch` or `fetch_raw`: its blocks go to `on_block`; True where its end was heard.

        Not sent again: what is missing is for the caller to see, and to ask for.
        """
        self._send(self._next(name, values))
        quiet_from = self.port.clock()
        while self.port.clock() - quiet_from < idle_s:
            for message in self._pump(idle_s):
                if message.sequence != self.sequence:
                    self.frames.counters.late += 1
                    continue
                quiet_from = self.port.clock()
                if message.name == BLOCKS[name]:
                    on_block(message)
                elif message.name == "refusal":
                    raise refused(name, message)
                else:
                    return True
            if self._at_prompt():
                self._rescue()
                return False
        return False

    def abort(self) -> None:
        """Send the abort of this session; the reply, if any, is nobody's business here."""
        self._send(pack("abort", self.session, 0))

    def wait_notice(
        self, name: str, deadline_s: float, sweep_id: bytes | None = None
    ) -> Message | None:
        """The next notice of that name, and of that sweep, or None when the time is over."""
        return self._wait(name, sweep_id, deadline_s, lambda: False)

    def wait_quiet(self, deadline_s: float, sweep_id: bytes | None = None) -> Message | None:
        """Wait out a charge, with a heartbeat twice a second: its notice, or None where that was
        not heard. A device that answers a heartbeat is charging no more.
        """
        self._beat_answered = False
        self._beats.clear()
        return self._wait(
            "charge_ended", sweep_id, deadline_s, lambda: self._beat_answered, self.beat
        )

    def beat(self) -> None:
        """Let the device know that the host is there, without waiting for the reply."""
        self._send(self._next("heartbeat", None))
        self._beats.add(self.sequence)

    # -- conversation --------------------------------------------------------------------

    def _next(self, name: str, values: dict[str, Any] | None) -> bytes:
        self.sequence += 1
        return pack(name, self.session, self.sequence, values)

    def _send(self, body: bytes, *, again: bool = False, nudge: bytes = b"") -> None:
        room = self.device.get("max_frame", SMALL_FRAME)
        if len(body) + framing.CRC_BYTES > room:
            raise ValueError(f"a body of {len(body)} bytes; the device takes {room} with its CRC")
        coded = nudge + framing.GUARD + framing.encode(body, toward_device=True)
        self.port.write(coded)
        self.frames.sent(self.port.clock(), coded, body, again=again)

    def _wait(
        self,
        name: str,
        sweep_id: bytes | None,
        deadline_s: float,
        over: Callable[[], bool],
        beat: Callable[[], None] | None = None,
    ) -> Message | None:
        end = self.port.clock() + deadline_s
        due = self.port.clock() + BEAT_S
        while True:
            while self.notices:
                notice = self.notices.popleft()
                if notice.name == name and sweep_id in (None, notice["sweep_id"]):
                    return notice
            now = self.port.clock()
            if now >= end or over():
                return None
            if beat is not None and now >= due:
                beat()
                due = now + BEAT_S
            # What answers here answers a request that was given up, or one sent twice.
            self.frames.counters.late += len(self._pump(min(end - now, BEAT_S)))
            if self._at_prompt():
                self._rescue()

    def _greet(self, deadline_s: float, rescues: int) -> dict[str, Any]:
        body = hello_body(self.host_nonce)
        reply = self._converse("hello", HELLO_SEQUENCE, body, deadline_s, 2 * AGAIN_S, rescues)
        self._check_version(reply)
        if reply["window"] < 1 or reply["max_frame"] < SMALL_FRAME:
            raise impossible_hello(self.port.name, reply.values)
        if reply["session"] != self.session:
            self.sequence = 0
        self.session = reply["session"]
        self.device = reply.values
        return self.device

    def _converse(
        self,
        name: str,
        sequence: int,
        body: bytes,
        deadline_s: float,
        again_s: float,
        rescues: int = 2,
    ) -> Message:
        kind = catalogue.KINDS[name]
        end = self.port.clock() + deadline_s
        again = self.port.clock()
        tries = 0
        nudge = HELLO_NUDGE if name == "hello" else NUDGE
        while True:
            now = self.port.clock()
            if now >= end:
                raise self._silent(name, deadline_s)
            if now >= again:
                self._send(body, again=tries > 0, nudge=nudge if tries >= NUDGE_AFTER else b"")
                tries += 1
                again = now + again_s
            for message in self._pump(min(end, again) - now):
                if message.sequence != sequence:
                    self.frames.counters.late += 1
                elif message.name == "refusal" and message["of_kind"] == kind:
                    raise refused(name, message)
                elif catalogue.KINDS[message.name] == kind | catalogue.REPLY:
                    return message
            if rescues and self._at_prompt():
                rescues -= 1
                self._rescue()
                # The rescue had a deadline of its own; this request has what it had left.
                end += self.port.clock() - now
                again = self.port.clock()

    def _pump(self, timeout_s: float) -> list[Message]:
        """Read once; messages other than notices, in order."""
        out: list[Message] = []
        data = self.port.read(max(timeout_s, 0.0))
        for item in self._decoder.feed(data):
            now = self.port.clock()
            if isinstance(item, framing.Bad):
                self._hear(self.frames.bad(now, item))
                continue
            self.frames.received(now, item)
            try:
                message = unpack(item)
            except Refused as error:
                log.warning("a frame that is no message of this catalogue: %s", error)
                continue
            if message.name in ("charge_ended", "bleed_ended"):
                self.notices.append(message)
            elif message.sequence in self._beats:
                self._beats.discard(message.sequence)
                self._beat_answered = True
            else:
                out.append(message)
        return out

    # -- the prompt ------------------------------------------------------------------------

    def _hear(self, text: str) -> None:
        if text:
            self.text = (self.text + text)[-TEXT_CHARACTERS:]
            log.warning("text from the device, outside any frame: %s", text.strip())

    def _said(self) -> str:
        """All text heard outside frames, with what is pending."""
        return self.text + framing.readable(self._decoder.pending())

    def _at_prompt(self) -> bool:
        said = self._said()
        return any(sign in said for sign in PROMPT_SIGNS)

    def _rescue(self) -> None:
        """From the prompt back into the service. ProtocolError where it does not come up."""
        said = self._said()
        traceback = traceback_in(said)
        if traceback:
            self.tracebacks.append(traceback)
            log.warning("the firmware stopped: %s", traceback)
        log.warning("a prompt answered in the firmware's place; starting the firmware again")
        self.frames.counters.rescues += 1
        end = self.port.clock() + RESCUE_S
        while True:
            self.port.write(LEAVE_LINE)
            self._settle()
            self.port.write(START_LINE)
            try:
                self._greet(min(1.5, max(end - self.port.clock(), 0.1)), rescues=0)
                return
            except LinkError:
                # A line that was damaged on its way; the prompt is there again.
                if self.port.clock() >= end:
                    raise
            except ProtocolError:
                # Without the firmware's files no other try helps.
                if self.port.clock() >= end or "ImportError" in self._said():
                    raise
            finally:
                self.text = ""

    def _settle(self) -> None:
        """Let the prompt say what it says, and forget it."""
        end = self.port.clock() + PROMPT_S
        while (left := end - self.port.clock()) > 0:
            self.port.read(left)
        self._decoder = framing.Decoder(RUN_BYTES, toward_device=False)
        self.text = ""

    def _silent(self, name: str, deadline_s: float) -> LinkError | ProtocolError:
        asked = f"asking {self.port.name} for {name}"
        crash = self.tracebacks[-1] if self.tracebacks else ""
        return silent(
            asked, deadline_s, self._said(), self._at_prompt(), crash, self.frames.summary()
        )

    def _check_version(self, reply: Message) -> None:
        device = (reply["major"], reply["minor"])
        same_catalogue = reply["fingerprint"] == fingerprint()
        # While the major version is 0, every catalogue of its own is a version of its own.
        if device[0] != PROTOCOL[0] or not (same_catalogue or device[0] > 0):
            raise other_version(self.port.name, reply.values)
