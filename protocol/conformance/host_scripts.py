"""The scripts: what the scripted device does wrong or unusual, and what a host must make of it.

A script that ends in a sweep is passed where the host acknowledges it. What a person at the
host should see is told as well; that, nobody can check from outside.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from conformance.host_answers import ScriptedDevice
from conformance.host_device import Twist
from conformance.host_twists import (
    STOP_LOOP,
    TWICE,
    BlocksMissing,
    Doubled,
    FireRefused,
    ForgottenBehindFire,
    GarbageBetween,
    LongCharge,
    LongerBodies,
    LostOnce,
    NoticeOfAnother,
    NoticesLost,
    OthersReplies,
    OtherVersion,
    PromptInPlace,
    RawBeyondTheCount,
    RawBlocksMissing,
    RawOfAnotherFetch,
    ResetBehindFire,
    Silent,
    UnknownKinds,
    WrongOnce,
)
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
from conformance.report import Unseen
from kneewire import PROTOCOL, catalogue
from kneewire.messages import Message, fingerprint

# A byte of a sum in the first knot, or of a code in the first raw pair, behind first and length.
IN_A_KNOT, IN_A_RAW_PAIR = 3 + 8, 4
# -- what must come of it: "" where it has, else what was found ------------------------------


Judge = Callable[[Log, ScriptedDevice], str]


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


def gaps_asked_for(name: str) -> Judge:
    """A sweep, and not by asking for all from the beginning again."""

    def judge(log: Log, device: ScriptedDevice) -> str:
        fetches = [entry for entry in log if isinstance(entry, Heard) and entry.name == name]
        if fetches and not any(entry.get("first") for entry in fetches):
            return "no gap asked for by its place"
        return swept(log, device)

    return judge


def raw_too(judge: Judge) -> Judge:
    """`judge`, for a host that asks for raw pairs. Raises Unseen for another."""

    def judged(log: Log, device: ScriptedDevice) -> str:
        asked = any(isinstance(entry, Heard) and entry.name == "fetch_raw" for entry in log)
        armed = [entry for entry in log if isinstance(entry, Heard) and entry.name == "arm"]
        if not asked and not any(entry.get("raw_pairs") for entry in armed):
            raise Unseen("the host has asked for no raw pairs")
        return judge(log, device)

    return judged


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
    """`judge` says what is wrong, "" where nothing is; `seen` is for the person at the host.

    Where the host does not do what the script is about, it raises Unseen.
    """

    name: str
    clauses: tuple[str, ...]
    expected: str
    seen: str
    twist: Callable[[], Twist]
    judge: Judge


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
        gaps_asked_for("fetch"),
    ),
    Script(
        "wrong knots once",
        ("W12",),
        SWEPT,
        CURVE,
        lambda: WrongOnce("block", IN_A_KNOT),
        swept,
    ),
    Script(
        "missing blocks of raw pairs",
        ("K7",),
        "gaps asked for by their place, and a whole sweep",
        CURVE,
        RawBlocksMissing,
        raw_too(gaps_asked_for("fetch_raw")),
    ),
    Script(
        "wrong raw pairs once",
        ("K8",),
        SWEPT,
        CURVE,
        lambda: WrongOnce("raw_block", IN_A_RAW_PAIR),
        raw_too(swept),
    ),
    Script("raw pairs beyond the count", ("K8",), SWEPT, CURVE, RawBeyondTheCount, raw_too(swept)),
    Script("raw pairs of another fetch", ("B6",), SWEPT, CURVE, RawOfAnotherFetch, raw_too(swept)),
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
