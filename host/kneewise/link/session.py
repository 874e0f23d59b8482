"""One session with a device: requests with one deadline each, replies, notices, blocks.

The thread that calls owns the port. A request is sent again, with the same sequence, while its
reply is missing; the device acts on it once. What comes outside frames is kept as text and
shown as what it is.
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
from kneewise.link.port import Port
from kneewise.link.refusals import refused

log = logging.getLogger(__name__)
log.addHandler(logging.NullHandler())

# A prompt shows itself, or echoes what it is sent: the sequence of a hello.
PROMPT_SIGNS = (">>>", "MicroPython", "HiKne")
RUN_BYTES = 4096  # far more than a frame: a whole traceback is to be shown
HELLO_S = 3.0
REQUEST_S = 2.0
AGAIN_S = 0.4
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
        self.texts: deque[str] = deque(maxlen=16)
        self.frames_bad = 0
        self._decoder = framing.Decoder(RUN_BYTES, toward_device=False)

    def take_over(self, port: Port) -> None:
        """Go on over another port, after the link was lost. `hello` must follow."""
        self.port = port
        self._decoder = framing.Decoder(RUN_BYTES, toward_device=False)

    def hello(self, deadline_s: float = HELLO_S) -> dict[str, Any]:
        """Open or resume the session; the device's answer. ProtocolError, LinkError."""
        body = hello_body(self.host_nonce)
        # "#" makes a prompt's line a comment; the delimiter ends it as a frame for the firmware.
        frame = b"#" + framing.DELIMITER + framing.encode(body, toward_device=True)
        reply = self._converse("hello", HELLO_SEQUENCE, frame, deadline_s, AGAIN_S)
        self._check_version(reply)
        if reply["session"] != self.session:
            self.sequence = 0
        self.session = reply["session"]
        self.device = reply.values
        return self.device

    def request(
        self,
        name: str,
        values: dict[str, Any] | None = None,
        *,
        deadline_s: float = REQUEST_S,
        again_s: float = AGAIN_S,
        on_block: Callable[[Message], None] | None = None,
    ) -> Message:
        """Send a request and return its reply; blocks that come before it go to `on_block`.

        Raises RefusedError where the device refuses, LinkError where no reply comes in time.
        """
        self.sequence += 1
        frame = framing.encode(pack(name, self.session, self.sequence, values), toward_device=True)
        return self._converse(name, self.sequence, frame, deadline_s, again_s, on_block)

    def abort(self) -> None:
        """Send the abort of this session; the reply, if any, is nobody's business here."""
        frame = framing.encode(pack("abort", self.session, 0), toward_device=True)
        self.port.write(framing.DELIMITER + frame)

    def wait_notice(
        self, name: str, deadline_s: float, beat: Callable[[], None] | None = None
    ) -> Message | None:
        """The next notice of that name, or None when the time is over.

        `beat` is called about twice a second while waiting.
        """
        end = self.port.clock() + deadline_s
        while True:
            while self.notices:
                notice = self.notices.popleft()
                if notice.name == name:
                    return notice
            left = end - self.port.clock()
            if left <= 0:
                return None
            before = self.port.clock()
            self._pump(min(left, 0.5))
            if beat is not None and self.port.clock() - before >= 0.5:
                beat()

    def beat(self) -> None:
        """Let the device know that the host is there, without waiting for the reply."""
        self.sequence += 1
        frame = framing.encode(pack("heartbeat", self.session, self.sequence), toward_device=True)
        self.port.write(frame)

    def _converse(
        self,
        name: str,
        sequence: int,
        frame: bytes,
        deadline_s: float,
        again_s: float,
        on_block: Callable[[Message], None] | None = None,
    ) -> Message:
        kind = catalogue.KINDS[name]
        start = self.port.clock()
        end = start + deadline_s
        again = start
        while True:
            now = self.port.clock()
            if now >= end:
                raise self._silent(name, deadline_s)
            if now >= again:
                self.port.write(frame)
                again = now + again_s
            for message in self._pump(min(end, again) - now):
                if message.sequence != sequence:
                    continue
                if message.name == "refusal" and message["of_kind"] == kind:
                    raise refused(name, message)
                if message.name == "block":
                    # A burst under way is an answer under way: no need to ask again.
                    again = self.port.clock() + again_s
                    if on_block is not None:
                        on_block(message)
                elif catalogue.KINDS[message.name] == kind | catalogue.REPLY:
                    return message

    def _pump(self, timeout_s: float) -> list[Message]:
        """Read once; messages other than notices, in order."""
        out: list[Message] = []
        for item in self._decoder.feed(self.port.read(timeout_s)):
            if isinstance(item, framing.Bad):
                self._note_bad(item)
                continue
            try:
                message = unpack(item)
            except Refused as error:
                self.frames_bad += 1
                log.warning("a frame that is no message of this catalogue: %s", error)
                continue
            if message.name == "charge_ended":
                self.notices.append(message)
            else:
                out.append(message)
        return out

    def _note_bad(self, bad: framing.Bad) -> None:
        text = bad.text()
        if text:
            self.texts.append(text)
            log.warning("text from the device, outside any frame: %s", text.strip())
        else:
            self.frames_bad += 1
            log.info("bad frame (%s), %d bytes", bad.reason, len(bad.raw))

    def _said(self) -> str:
        """All text heard outside frames, with what is pending."""
        return "".join(self.texts) + framing.readable(self._decoder.pending())

    def _silent(self, name: str, deadline_s: float) -> LinkError | ProtocolError:
        said = self._said()
        asked = f"asking {self.port.name} for {name}"
        if any(sign in said for sign in PROMPT_SIGNS):
            return ProtocolError(
                asked,
                found="a MicroPython prompt",
                expected="the Kneewise firmware",
                next_step="reset the board to start the firmware; if the prompt comes back, "
                "store the firmware on it (device/README.md)",
            )
        if "Traceback" in said:
            return ProtocolError(
                asked,
                found="a traceback: " + said[said.index("Traceback") :].strip()[-300:],
                expected="the Kneewise firmware",
                next_step="reset the board; if it happens again, report the traceback",
            )
        return LinkError(
            asked,
            found=f"no answer in {deadline_s:g} s"
            + (f", only {self.frames_bad} damaged frames" if self.frames_bad else ""),
            expected="a reply",
            next_step="check that this is the tracer's port and that the tracer has power; "
            "the capacitor may hold charge",
        )

    def _check_version(self, reply: Message) -> None:
        device = (reply["major"], reply["minor"])
        same_catalogue = reply["fingerprint"] == fingerprint()
        # While the major version is 0, every catalogue of its own is a version of its own.
        if device[0] == PROTOCOL[0] and (same_catalogue or device[0] > 0):
            return
        host = f"protocol {PROTOCOL[0]}.{PROTOCOL[1]}, catalogue {fingerprint():08x}"
        firmware = ".".join(str(reply[f"firmware_{part}"]) for part in ("major", "minor", "patch"))
        raise ProtocolError(
            f"greeting {self.port.name}",
            found=f"the device has protocol {device[0]}.{device[1]}, "
            f"catalogue {reply['fingerprint']:08x} (firmware {firmware})",
            expected=f"the host has {host}",
            next_step="store the firmware that came with this host on the device, "
            "or install the host version that came with that firmware",
        )
