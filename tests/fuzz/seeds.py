"""Writes the seeds of the corpora, from the examples of the wire: `python -m tests.fuzz.seeds`.

What a fuzzer has found since stands beside them, under names of its own.
"""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Any

from kneewire import catalogue, framing
from kneewire.messages import NO_SESSION, pack, pack_knot, unpack
from kneewise.link.recording import FORMAT, protocol

from .fuzz_service import LAST, NEXT, SESSION
from .targets import CORPUS

sys.path.insert(0, str(Path(__file__).parents[1] / "protocol"))

from wire_examples import EXAMPLES, HELLO_SEQUENCE, KNOTS, SWEEP_ID

BLOCK = {"first": 0, "data": b"".join(pack_knot(knot) for knot in KNOTS)}
TRACEBACK = (
    b"\r\nTraceback (most recent call last):\r\n"
    b'  File "main.py", line 1, in <module>\r\nKeyboardInterrupt: \r\nMicroPython v1.2\r\n>>> '
)
RAW_BLOCK = EXAMPLES["raw_block"] | {"first": 0}
SWEEP = (
    *("hello", "arm", "fire", b"t\x09", "read_manifest", "fetch", "fetch_raw"),
    *("acknowledge", "status"),
)
SCRIPTS: dict[str, tuple[Any, ...]] = {
    "sweep": SWEEP,
    "abort": ("hello", "arm", "abort", "fire", "hello"),
    "abort-in-charge": ("hello", "arm", "fire", "abort", "status", b"t\x02", "read_manifest"),
    "asked-in-charge": ("hello", "arm", "fire", "status", "arm", "heartbeat", "hello"),
    "prompt": ("hello", "arm", "prompt", "fire", "status"),
    "lid": ("hello", "arm", b"w\x01", "fire", "status", "clear_fault", b"w\x10", b"t\x09", "arm"),
    "over-voltage": ("hello", "arm", "fire", b"w\x10", "status", "clear_fault", "arm"),
    "welded": ("hello", b"w\x88", b"t\x7f", b"t\x7f", "prompt", "status", "clear_fault"),
    "bleed-broken": ("hello", b"w\x84", b"t\x7f", b"t\x7f", "arm", "clear_fault", "status"),
    "interrupted": ("hello", "arm", "fire", b"c\x10", "status", "read_manifest", b"c\x01"),
    "expired": ("hello", "arm", b"t\xfa", "fire", "arm", "fire"),
    "twice": ("hello", "arm", ("arm", LAST), "fire", ("fire", LAST), ("arm", 0)),
    "noise": ("hello", b"#", b"\x05ab", b"x\x03y", b"#", "read_profile", "heartbeat"),
}


def body(name: str, session: int = SESSION, sequence: int = NEXT) -> bytes:
    values = {"block": BLOCK, "raw_block": RAW_BLOCK}.get(name, EXAMPLES[name])
    if name in {"hello", "hello_reply"}:
        session, sequence = NO_SESSION if name == "hello" else session, HELLO_SEQUENCE
    if name in {"fetch", "fetch_raw"}:
        values = {**values, "first": 0, "count": 16}
    return pack(name, session, sequence, values)


def decoder_seeds() -> dict[str, bytes]:
    found = {name: framing.encode(body(name), False) for name in catalogue.KINDS}
    found["to-device"] = b"".join(
        framing.GUARD + framing.encode(body(name), True) for name in SWEEP if isinstance(name, str)
    )
    found["prompt-text"] = found["status_reply"] + TRACEBACK + b"\0" + found["heartbeat_reply"]
    found["damaged"] = found["manifest"][:-9] + found["profile"] + b"\xff" * 700 + b"\0"
    return found


def service_seeds() -> dict[str, bytes]:
    def run(step: Any) -> bytes:
        if isinstance(step, bytes):
            return step + b"\0"
        name, sequence = step if isinstance(step, tuple) else (step, NEXT)
        return framing.encode(body(name, sequence=0 if name == "abort" else sequence), False)

    return {name: b"".join(run(step) for step in script) for name, script in SCRIPTS.items()}


def replay_seeds() -> dict[str, bytes]:
    header = {
        "kneewise_recording": FORMAT,
        "protocol": protocol(),
        "target": "COM5",
        "begun_utc": "2031-05-06T07:08:09+00:00",
    }
    lines: list[dict[str, Any]] = [header]

    def note(to: str, data: bytes) -> None:
        lines.append({"t": round(0.01 * len(lines), 6), "to": to, "hex": data.hex()})

    for number, name in enumerate(step for step in SWEEP if isinstance(step, str)):
        asked = body(name, sequence=number)
        request = unpack(asked)
        answer = catalogue.MESSAGES[asked[0] | catalogue.REPLY][0]
        note("device", framing.GUARD + framing.encode(asked, True))
        if name == "fetch":
            note("host", framing.encode(pack("block", SESSION, number, BLOCK), False))
        if name == "fetch_raw":
            note("host", framing.encode(pack("raw_block", SESSION, number, RAW_BLOCK), False))
        said = pack(answer, SESSION, request.sequence, EXAMPLES[answer])
        note("host", framing.encode(said, False))
        if name == "fire":
            ended = {"sweep_id": SWEEP_ID, "end_reason": 1}
            note("host", framing.encode(pack("charge_ended", SESSION, 0, ended), False))
    whole = "".join(json.dumps(line) + "\n" for line in lines)
    reopened = [*lines[:5], {"t": 7.5, "event": "opened"}, *lines[1:3]]
    return {
        "sweep": whole.encode(),
        "reopened": "".join(json.dumps(line) + "\n" for line in reopened).encode(),
        "cut-short": whole.encode()[:-20],
        "prompt": (json.dumps(header) + "\n").encode()
        + json.dumps({"t": 0, "to": "host", "hex": TRACEBACK.hex()}).encode()
        + b"\n",
        "header-alone": (json.dumps(header) + "\n").encode(),
        "no-recording": b"{}\n",
    }


def main() -> None:
    for target, seeds in (
        ("decoder", decoder_seeds()),
        ("service", service_seeds()),
        ("replay", replay_seeds()),
    ):
        folder = CORPUS / target
        folder.mkdir(parents=True, exist_ok=True)
        for name, data in seeds.items():
            (folder / f"seed-{name}").write_bytes(data)


if __name__ == "__main__":
    main()
