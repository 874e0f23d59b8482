"""The scripts: what the scripted device does wrong or unusual, and what a host must make of it.

A script that ends in a sweep is passed where the host acknowledges it. What a person at the
host should see is told as well; that, nobody can check from outside.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from conformance.host_answers import ScriptedDevice
from conformance.host_device import SAFE, Conversation, Twist
from conformance.host_watch import (
    CHANGING,
    FROZEN,
    LEFT,
    LOST,
    SHOWN,
    STARTED,
    Event,
    Heard,
    Log,
    Said,
)
from kneewire import PROTOCOL, catalogue, framing
from kneewire.messages import HEADER_BYTES, Message, fingerprint, pack

OTHERS_SEQUENCE = 100000  # of a reply that belongs to no request
UNKNOWN_KIND = 0xEE
LONG_GARBAGE = 1500
STOP_LOOP = 12
TRACEBACK = (
    b"Traceback (most recent call last):\r\n"
    b'  File "tracer/loop.py", line 60, in step\r\n'
    b"ValueError: made up by a script\r\n"
)
TWICE = 2


def coded(body: bytes) -> bytes:
    return framing.encode(body, False)


class LongCharge(Twist):
    charge_s = 1.3


class LostOnce(Twist):
    """The first reply of each name is lost."""

    def __init__(self) -> None:
        self._seen = {"block", "charge_ended", "bleed_ended"}

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name in self._seen:
            return [coded(body)]
        self._seen.add(message.name)
        return []


class NoticesLost(Twist):
    charge_s = 0.9

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        return [] if message.name in ("charge_ended", "bleed_ended") else [coded(body)]


class Doubled(Twist):
    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        return [coded(body), coded(body)]


class OthersReplies(Twist):
    """Before each reply comes one to somebody else's request, and a refusal of one."""

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if not message.sequence:
            return [coded(body)]
        other = message.sequence + OTHERS_SEQUENCE
        head = body[:5] + other.to_bytes(4, "little")
        values = {"of_kind": body[0] & ~catalogue.REPLY, "code": 7, "guard": 0}
        values |= {"measured": 0, "limit": 0, "unit": 0}
        refusal = pack("refusal", message.session, other, values)
        return [coded(head + body[HEADER_BYTES:]), coded(refusal), coded(body)]


class UnknownKinds(Twist):
    """With the header of what they surround."""

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        unknown = coded(bytes([UNKNOWN_KIND]) + body[1:HEADER_BYTES] + b"of a later version")
        return [unknown, coded(body), unknown]


class LongerBodies(Twist):
    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        room = catalogue.MAX_FRAME - framing.CRC_BYTES - len(body)
        return [coded(body + bytes(range(250, 256))[:room])]


class BlocksMissing(Twist):
    """Every second block of the first two bursts."""

    def __init__(self) -> None:
        self._blocks = self._bursts = 0

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name == "fetch_reply":
            self._bursts += 1
        elif message.name == "block":
            self._blocks += 1
            if self._bursts < TWICE and self._blocks % 2:
                return []
        return [coded(body)]


class KnotsWrongOnce(Twist):
    """One knot of the first block is not what the manifest's CRC was made of."""

    done = False

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name == "block" and not self.done:
            self.done = True
            wrong = bytearray(body)
            wrong[HEADER_BYTES + 3 + 8] ^= 0x40
            return [coded(bytes(wrong))]
        return [coded(body)]


class NoticeOfAnother(Twist):
    """A charge_ended of another sweep comes late, while this one charges."""

    charge_s = 1.3

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name == "fire_reply":
            values = {"sweep_id": bytes(range(16)), "end_reason": 1}
            late = coded(pack("charge_ended", message.session, 0, values))
            device.later(0.1, lambda: device.say(late))
        return [coded(body)]


class FireRefused(Twist):
    def request(self, device: Conversation, message: Message) -> bool:
        if message.name != "fire" or message.sequence in device.stored:
            return False
        device.highest = message.sequence
        device.token = 0
        device.state = SAFE
        device.refuse(message, "interlock", STOP_LOOP)
        return True


class ResetBehindFire(Twist):
    def request(self, device: Conversation, message: Message) -> bool:
        if message.name == "fire" and message.session == device.session:
            device.reset()
            return True
        return False


class ForgottenBehindFire(Twist):
    def request(self, device: Conversation, message: Message) -> bool:
        if message.name == "fire" and message.session == device.session:
            device.forget_session()
        return False


class PromptInPlace(Twist):
    """In place of the answer to the first arm."""

    shown = False

    def request(self, device: Conversation, message: Message) -> bool:
        if message.name == "arm" and not self.shown:
            self.shown = True
            device.show_prompt(TRACEBACK)
            return True
        return False


class OtherVersion(Twist):
    """Fields of hello_reply that are not those of this version."""

    def __init__(self, **fields: int) -> None:
        self._fields = fields

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name == "hello_reply":
            values = {**message.values, **self._fields}
            body = pack("hello_reply", message.session, message.sequence, values)
        return [coded(body)]


class GarbageBetween(Twist):
    """Of all lengths; every sixth time without a delimiter, which costs the frame behind it."""

    def __init__(self) -> None:
        self._times = 0

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        self._times += 1
        size = LONG_GARBAGE if self._times == TWICE else device.random.randrange(1, 80)
        noise = bytes(device.random.randrange(256) for _ in range(size))
        empty = 3 * framing.DELIMITER
        spoils = self._times % 6 == 0 and message.name != "hello_reply"
        return [empty + noise + (b"" if spoils else framing.DELIMITER) + coded(body)]


class Silent(Twist):
    def request(self, device: Conversation, message: Message) -> bool:
        return True


# -- what must come of it: "" where it has, else what was found ------------------------------


def swept(log: Log, device: ScriptedDevice) -> str:
    return "" if device.freed else "the host has not acknowledged a sweep"


def swept_by_repeats(log: Log, device: ScriptedDevice) -> str:
    """What changes state was asked for again with the same sequence, bytes alike."""
    for place, entry in enumerate(log):
        if not isinstance(entry, Event) or entry.what != LOST or entry.message is None:
            continue
        kind = catalogue.KINDS[entry.message.name] & ~catalogue.REPLY
        name = catalogue.MESSAGES[kind][0] if kind in catalogue.MESSAGES else ""
        if name in CHANGING | {"hello"} and not _asked_again(log, place, name, entry.message):
            return f"{name} not asked for again while its answer was missing"
    return swept(log, device)


def _asked_again(log: Log, place: int, name: str, lost: Message) -> bool:
    asked = [
        (number, entry.body)
        for number, entry in enumerate(log)
        if isinstance(entry, Heard) and (entry.name, entry.sequence) == (name, lost.sequence)
    ]
    first = [body for number, body in asked if number < place]
    return bool(first) and any(body == first[-1] for number, body in asked if number > place)


def swept_again_by_place(log: Log, device: ScriptedDevice) -> str:
    fetches = [entry for entry in log if isinstance(entry, Heard) and entry.name == "fetch"]
    if fetches and not any(entry.get("first") for entry in fetches):
        return "no gap asked for by its place"
    return swept(log, device)


def not_fired_again(log: Log, device: ScriptedDevice) -> str:
    fires = [entry for entry in log if isinstance(entry, Heard) and entry.name == "fire"]
    if not fires:
        return "the host has not fired"
    others = {(entry.session, entry.sequence) for entry in fires}
    return f"{len(others)} fires" if len(others) > 1 else ""


def refusal_taken(log: Log, device: ScriptedDevice) -> str:
    fires = [entry for entry in log if isinstance(entry, Heard) and entry.name == "fire"]
    tokens = [entry.get("token") for entry in fires]
    if not fires:
        return "the host has not fired"
    again = len({entry.sequence for entry in fires}) > len(set(tokens))
    return "a token fired again after its fire was refused" if again else ""


def rescued(log: Log, device: ScriptedDevice) -> str:
    words = [entry.what for entry in log if isinstance(entry, Event)]
    behind = words[words.index(SHOWN) :] if SHOWN in words else []
    if LEFT not in behind:
        return "the prompt was not left by 0d 03 03 02"
    if STARTED not in behind[behind.index(LEFT) :]:
        return "the firmware was not started by its line"
    return swept(log, device)


def only_frozen(log: Log, device: ScriptedDevice) -> str:
    told = False
    for entry in log:
        if isinstance(entry, Said) and entry.name == "hello_reply":
            told = True
        elif told and isinstance(entry, Heard) and entry.name not in FROZEN:
            return f"{entry.name} to a device of another version"
    return "" if told else "the host has not said hello"


def asked_in_vain(log: Log, device: ScriptedDevice) -> str:
    hellos = [entry.body for entry in log if isinstance(entry, Heard) and entry.name == "hello"]
    if len(hellos) < TWICE:
        return f"{len(hellos)} hellos"
    return "" if len(set(hellos)) == 1 else "hellos that differ"


@dataclass(frozen=True, slots=True)
class Script:
    """`judge` says what is wrong, "" where nothing is; `seen` is for the person at the host."""

    name: str
    clauses: tuple[str, ...]
    expected: str
    seen: str
    twist: Callable[[], Twist]
    judge: Callable[[Log, ScriptedDevice], str]


SWEPT = "a sweep that the host acknowledges"
CURVE = "a curve"
SCRIPTS: tuple[Script, ...] = (
    Script("plain sweep", ("W10",), SWEPT, CURVE, LongCharge, swept),
    Script(
        "lost replies",
        ("S6",),
        "the same request again, and a sweep although each reply is lost once",
        CURVE,
        LostOnce,
        swept_by_repeats,
    ),
    Script("lost notices", ("W8",), SWEPT, CURVE, NoticesLost, swept),
    Script("doubled replies", ("B6",), SWEPT, CURVE, Doubled, swept),
    Script("somebody else's replies", ("B6",), SWEPT, CURVE, OthersReplies, swept),
    Script("unknown kinds", ("B6",), SWEPT, CURVE, UnknownKinds, swept),
    Script("longer bodies", ("B2",), SWEPT, CURVE, LongerBodies, swept),
    Script(
        "missing blocks",
        ("W11",),
        "gaps asked for by their place, and a whole sweep",
        CURVE,
        BlocksMissing,
        swept_again_by_place,
    ),
    Script("wrong knots once", ("W12",), SWEPT, CURVE, KnotsWrongOnce, swept),
    Script("a notice of another sweep", ("W8",), SWEPT, CURVE, NoticeOfAnother, swept),
    Script(
        "fire refused",
        ("W3",),
        "no second fire with its token",
        f"a refusal that names hazard H{STOP_LOOP}",
        FireRefused,
        refusal_taken,
    ),
    Script(
        "reset behind the fire",
        ("W14",),
        "no second fire",
        "that the outcome is unknown, and why the device was reset",
        ResetBehindFire,
        not_fired_again,
    ),
    Script(
        "session forgotten behind the fire",
        ("W14",),
        "no second fire",
        "that the outcome is unknown",
        ForgottenBehindFire,
        not_fired_again,
    ),
    Script(
        "prompt in the firmware's place",
        ("R2", "R3"),
        "0d 03 03 02 and the line that starts the firmware, then " + SWEPT,
        CURVE + ", and the traceback where warnings are shown",
        PromptInPlace,
        rescued,
    ),
    Script(
        "another catalogue",
        ("V2",),
        "nothing but hello and prompt",
        "what the host has, what the device has, what to do",
        lambda: OtherVersion(fingerprint=fingerprint() ^ 0x00010100),
        only_frozen,
    ),
    Script(
        "another major version",
        ("V3",),
        "nothing but hello and prompt",
        "what the host has, what the device has, what to do",
        lambda: OtherVersion(major=PROTOCOL[0] + 1),
        only_frozen,
    ),
    Script("garbage between", ("F6", "F7", "F8"), SWEPT, CURVE, GarbageBetween, swept),
    Script(
        "silence", ("S6",), "the same hello again", "that nobody answers", Silent, asked_in_vain
    ),
)
