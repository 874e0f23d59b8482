"""A device under test: its session, arming and sweeping, and leaving it safe.

Checks come here for what they need before they can look at a clause. Nothing closes a contact
but `sweep`, in `sweeping.py`, and nothing arms where `may_arm` is False.
"""

from __future__ import annotations

import secrets
from typing import Any
from zlib import crc32

from conformance.report import Broken, NotTried
from conformance.wire import ANSWER_S, Frame, Port, Wire
from kneewire import PROTOCOL, catalogue, framing
from kneewire.messages import NO_SESSION, Message, fingerprint, pack
from kneewire.profile_record import unpack_profile

HELLO_SEQUENCE = int.from_bytes(b"iKne", "little")
LETTERS = b"abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ"
HELLO_TRIES = 5
HELLO_S = 1.0
LATE_S = 0.2
SAFE_S = 60.0
NOTICES = ("charge_ended", "bleed_ended")
NEEDS_SWEEP = "needs --allow-sweep"
KNOTS = 40
LIMIT_MS = 60000


class Stop(Exception):
    """No further check can be made; the text says why."""


def hello_body(nonce: int, **other: int) -> bytes:
    """The body of a hello of this protocol; `other` changes what it says."""
    values = {
        "host_nonce": nonce,
        "fingerprint": fingerprint(),
        "major": PROTOCOL[0],
        "minor": PROTOCOL[1],
    }
    return pack("hello", NO_SESSION, HELLO_SEQUENCE, {**values, **other})


def new_nonce() -> int:
    """Four letters whose hello does no harm at a prompt (H5)."""
    while True:
        letters = bytes(secrets.choice(LETTERS) for _ in range(4))
        nonce = int.from_bytes(letters, "little")
        crc = crc32(hello_body(nonce)).to_bytes(4, "little")
        if all(byte >= 32 and byte != 127 for byte in crc):
            return nonce


class Bench(Wire):
    """One device, greeted. `allow_sweep` is the operator's word for a real one."""

    def __init__(self, port: Port, *, allow_sweep: bool = False) -> None:
        super().__init__(port)
        self.allow_sweep = allow_sweep
        self.nonce = 0
        self.session = NO_SESSION
        self.sequence = 0
        self.device: dict[str, Any] = {}
        self.profile: dict[str, Any] = {}
        self.own: set[bytes] = set()
        """Ids of the sweeps made here: what may be acknowledged."""
        self.made: dict[str, Any] = {}
        """Sweeps that several checks look at, by name; see `sweeping.py`."""

    @property
    def emulated(self) -> bool:
        return bool(self.device["flags"] & catalogue.FLAG_EMULATED)

    @property
    def may_arm(self) -> bool:
        """Nobody is there to be hurt, or somebody has looked."""
        return self.emulated or self.allow_sweep

    # -- the session -----------------------------------------------------------------------

    def connect(self) -> None:
        """Find the device. Stop where there is none that can be tested."""
        self.nonce = new_nonce()
        try:
            self.hello()
        except Broken as broken:
            raise Stop(f"nothing that speaks this protocol answers: {broken.found}") from broken
        if self.device["fingerprint"] != fingerprint():
            raise Stop(
                f"the device has catalogue {self.device['fingerprint']:08x}, this checker "
                f"{fingerprint():08x}: run the checker of the device's version"
            )
        record = self.ask("read_profile").reply("profile")["record"]
        self.profile = unpack_profile(record) if record else {}
        if self.status()["held"]:
            raise Stop("the device holds a sweep: fetch and acknowledge it, then check again")

    def hello(self, nonce: int | None = None, *, tries: int = HELLO_TRIES) -> Message:
        """Open or resume a session. Broken where no hello is answered."""
        self.nonce = self.nonce if nonce is None else nonce
        frame = framing.GUARD + framing.encode(hello_body(self.nonce), True)
        for attempt in range(tries):
            self.send(frame)
            frames = self.listen(HELLO_S, lambda heard: heard.name == "hello_reply")
            if frames and frames[-1].name == "hello_reply":
                if attempt:
                    self.listen(LATE_S)  # to an earlier try
                return self._greeted(frames[-1].reply("hello_reply"))
        said = self.said().strip()
        raise Broken(f"no answer to {tries} hellos" + (f"; {said[-200:]!r}" if said else ""))

    def _greeted(self, reply: Message) -> Message:
        if reply["session"] != self.session:
            self.sequence = 0
        self.session = reply["session"]
        self.device = reply.values
        return reply

    def fresh(self) -> None:
        """A session of its own, and a device that is safe where it can be."""
        self.hello(new_nonce())
        self.wait_safe()

    def settle(self) -> None:
        """After a check: aborted, and still answering. Broken where it does not."""
        self.send(self.abort_frame())
        self.hello()

    def leave(self) -> None:
        """Whatever has happened: nothing armed, nothing of ours held."""
        self.send(self.abort_frame())
        self.hello(new_nonce())
        self.wait_safe()
        self.drop_own()

    # -- requests --------------------------------------------------------------------------

    def next(self) -> int:
        self.sequence += 1
        return self.sequence

    def frame(
        self,
        name: str,
        values: dict[str, Any] | None = None,
        *,
        session: int | None = None,
        sequence: int | None = None,
    ) -> bytes:
        """Guard and frame, with the next sequence where none is given."""
        sequence = self.next() if sequence is None else sequence
        session = self.session if session is None else session
        return guarded(pack(name, session, sequence, values))

    def abort_frame(self) -> bytes:
        return self.frame("abort", sequence=0)

    def answers(self, raw: bytes, *, guard: bool = True, seconds: float = ANSWER_S) -> list[Frame]:
        """What the device answers to `raw`; notices are left out."""
        frames = self.exchange(raw, self.session, guard=guard, seconds=seconds)
        return [frame for frame in frames if frame.name not in NOTICES]

    def answer(self, raw: bytes) -> Frame:
        """The one answer to `raw`."""
        frames = self.answers(raw)
        if len(frames) != 1:
            raise Broken(f"{len(frames)} answers to one request")
        return frames[0]

    def ask(self, name: str, values: dict[str, Any] | None = None, **header: int) -> Frame:
        """The one answer to one request."""
        return self.answer(self.frame(name, values, **header))

    def status(self) -> Message:
        return self.ask("status").reply("status_reply")

    def state(self) -> str:
        return catalogue.STATES.get(self.status()["state"], "unknown")

    def counts(self) -> tuple[int, int]:
        """Frames good and bad, as the device has counted them up to here."""
        status = self.status()
        return status["frames_good"], status["frames_bad"]

    def wait_safe(self) -> str:
        """Wait out a bleed; the state then, "safe" or "fault"."""
        end = self.port.clock() + SAFE_S
        while (state := self.state()) not in ("safe", "fault"):
            if state == "armed":
                self.send(self.abort_frame())
            if self.port.clock() >= end:
                raise Broken(f"the state is {state} after {SAFE_S:g} s")
            self.listen(0.05)
        return state

    def wait_cool(self) -> None:
        """Wait until the bleed resistor has room for a sweep, `SAFE_S` at most."""
        rest_s = self.status()["rest_ms"] / 1000
        if rest_s:
            self.listen(min(rest_s, SAFE_S))

    # -- arming ----------------------------------------------------------------------------

    def drop_own(self) -> None:
        """Acknowledge a held sweep that was made here."""
        status = self.status()
        if status["held"] and status["sweep_id"] in self.own:
            self.ask("acknowledge", {"sweep_id": status["sweep_id"]})

    def arm_values(self, **changes: int) -> dict[str, int]:
        """Of an arm; confirmed only where `may_arm` says so."""
        values = {
            "knots": KNOTS,
            "closed_limit_ms": LIMIT_MS,
            "confirmed": int(self.may_arm),
            "raw_from_us": 0,
            "raw_pairs": 0,
            "limit_mv": 0xFFFFFFFF,
            "limit_ma": 0xFFFFFFFF,
            "exercise": 0,
        }
        return {**values, **changes}

    def arm(self, **changes: int) -> Message:
        """Armed. NotTried where that is not allowed, or a guard of the device speaks."""
        if not self.may_arm:
            raise NotTried(NEEDS_SWEEP)
        self.drop_own()
        self.wait_cool()
        frame = self.ask("arm", self.arm_values(**changes))
        if changes.get("raw_pairs") and frame.refusal() == "out of range":
            raise NotTried(f"the device has no room for {changes['raw_pairs']} raw pairs")
        if frame.refusal() == "interlock":
            guard = frame.reply("refusal")["guard"]
            raise NotTried(f"the device does not arm: guard H{guard} speaks")
        if frame.refusal() == "wrong state":
            raise NotTried(f"the device does not arm in state {self.state()}")
        return frame.reply("arm_reply")

    def fire_values(self, token: int) -> dict[str, Any]:
        """Of a fire, with an id that is known from here on as ours."""
        sweep_id = secrets.token_bytes(16)
        self.own.add(sweep_id)
        return {"token": token, "sweep_id": sweep_id}

    def refused_fire(self, token: int, why: str) -> None:
        """Fire with a token that must not be good any more. Broken where it is."""
        values = self.fire_values(token)
        frame = self.ask("fire", values)
        if frame.refusal() not in ("bad token", "wrong state"):
            if frame.name == "fire_reply":
                self.abort_charge(frame.reply("fire_reply")["quiet_ms"])
            raise Broken(f"{frame} to a fire with {why}")
        status = self.status()
        fired = catalogue.STATES.get(status["state"]) == "charging"
        if status["contact_closed"] or fired or status["sweep_id"] == values["sweep_id"]:
            raise Broken(f"something closed after a fire with {why}")

    def await_frame(self, name: str, start: int, seconds: float) -> Message:
        """The first of that name among what was heard from `start` on. Broken where none comes."""
        for frame in self.heard[start:]:
            if frame.name == name:
                return frame.reply(name)
        frames = self.listen(seconds, lambda frame: frame.name == name)
        if not frames or frames[-1].name != name:
            raise Broken(f"no {name} within {seconds:g} s")
        return frames[-1].reply(name)

    def abort_charge(self, quiet_ms: int) -> None:
        """End a charge that should not have begun."""
        self.send(self.abort_frame())
        self.listen(quiet_ms / 1000 + ANSWER_S, lambda frame: frame.name == "charge_ended")
        self.wait_safe()
        self.drop_own()


def guarded(body: bytes) -> bytes:
    """Guard and frame of any body."""
    return framing.GUARD + framing.encode(body, True)
