"""The golden vectors, made by the coder of wire_coder.py, which is not the product's.

`protocol/vectors/` holds what this makes. Tests compare the two; after a deliberate change of
the catalogue, `python tests/protocol/wire_golden.py` writes the files anew; with a version as
argument it freezes them in a folder of that name.
"""

from __future__ import annotations

import json
import struct
import sys
import zlib
from pathlib import Path
from typing import Any

from cobs import cobs
from wire_coder import body, frame, rows_of
from wire_examples import (
    EXAMPLES,
    HELLO_SEQUENCE,
    KNOTS,
    NO_SESSION,
    PROFILE,
    SESSION,
)

from kneewire import PROTOCOL, catalogue, profile_record

VECTORS = Path(__file__).resolve().parents[2] / "protocol" / "vectors"


def fingerprint() -> int:
    text = ""
    for name, rows in (("header", catalogue.HEADER), ("knot", catalogue.KNOT)):
        text += f"{name}:{','.join(f'{row[0]} {row[1]}' for row in rows)}\n"
    for kind, (name, direction, _, changes, rows) in sorted(catalogue.MESSAGES.items()):
        text += f"{kind} {name} {direction:d} {changes:d}:"
        text += ",".join(f"{row[0]} {row[1]}" for row in rows) + "\n"
    for codes in (
        catalogue.STATES,
        catalogue.RESET_CAUSES,
        catalogue.END_REASONS,
        catalogue.REFUSALS,
        catalogue.UNITS,
        catalogue.EXERCISES,
    ):
        text += ",".join(f"{code}={words}" for code, words in sorted(codes.items())) + "\n"
    return zlib.crc32(text.encode()) | 0x80808080


KNOT_BYTES = [rows_of(catalogue.KNOT, knot) for knot in KNOTS]
EXAMPLES["block"]["data"] = b"".join(KNOT_BYTES)


def plain(values: dict[str, Any]) -> dict[str, Any]:
    """Values as JSON holds them: bytes as hex."""
    return {
        name: value.hex() if isinstance(value, bytes) else value for name, value in values.items()
    }


# -- the files ---------------------------------------------------------------------------


def cobs_vectors() -> dict[str, Any]:
    paper = "Cheshire and Baker 1999; checked against the cobs package"
    package = "cobs package"
    ramp = bytes(range(1, 256))
    rows: list[tuple[str, bytes, bytes, str]] = [
        ("empty", b"", b"\x01", paper),
        ("one zero", bytes(1), b"\x01" * 2, paper),
        ("two zeros", bytes(2), b"\x01" * 3, paper),
        ("zeros around", bytes.fromhex("001100"), bytes.fromhex("01021101"), paper),
        ("zero inside", bytes.fromhex("11220033"), bytes.fromhex("0311220233"), paper),
        ("no zero", bytes.fromhex("11223344"), bytes.fromhex("0511223344"), paper),
        ("zeros at the end", bytes.fromhex("11000000"), bytes.fromhex("0211010101"), paper),
        ("254 bytes, none zero", ramp[:254], b"\xff" + ramp[:254], paper),
        ("255 bytes, none zero", ramp, b"\xff" + ramp[:254] + b"\x02\xff", paper),
    ]
    for name, data in (
        ("253 bytes, none zero", ramp[:253]),
        ("254 bytes, then a zero", ramp[:254] + b"\x00"),
        ("253 bytes, then a zero", ramp[:253] + b"\x00"),
        ("a zero, then 254 bytes", b"\x00" + ramp[:254]),
        ("254 bytes, a zero, one byte", ramp[:254] + b"\x00\x07"),
        ("508 bytes, none zero", ramp[:254] * 2),
        ("256 zeros", bytes(256)),
    ):
        rows.append((name, data, cobs.encode(data), package))
    return {
        "about": "COBS without the closing delimiter; all bytes as hex. 'encode' holds both ways, "
        "'decode_only' is never made but must be understood, 'bad' must be rejected.",
        "encode": [
            {"name": name, "data": data.hex(), "coded": coded.hex(), "source": source}
            for name, data, coded, source in rows
        ],
        "decode_only": [
            {
                "name": "a full block closed by an empty one",
                "coded": ("ff" + ramp[:254].hex() + "01"),
                "data": ramp[:254].hex(),
                "source": package,
            }
        ],
        "bad": [
            {"name": "nothing", "coded": ""},
            {"name": "code byte of zero", "coded": "00"},
            {"name": "block longer than the data", "coded": "05112233"},
            {"name": "code byte alone", "coded": "02"},
            {"name": "full block cut short", "coded": "ff" + ramp[:253].hex()},
            {"name": "zero inside a block", "coded": "03110002"},
            {"name": "second block cut short", "coded": "0211031122"[:8]},
        ],
    }


def _body_for(length: int) -> bytes:
    """A body whose frame has `length` bytes in both directions."""
    for seed in range(1000):
        content = bytes((seed + 7 * place) % 95 + 32 for place in range(length - 6))
        if len(frame(content, True)) == len(frame(content, False)) == length:
            return content
    raise AssertionError(length)


def _escaped_body_for(length: int) -> bytes:
    """A body of which every fourth byte is escaped; its frame toward the device has `length`."""
    for size in range(1, length):
        for seed in range(50):
            content = bytes(
                (2, 3)[place % 8 // 4] if place % 4 == 3 else (seed + 7 * place) % 95 + 32
                for place in range(size)
            )
            if len(frame(content, True)) == length:
                return content
    raise AssertionError(length)


def framing_vectors() -> dict[str, Any]:
    bodies: list[tuple[str, bytes]] = [
        ("one byte", b"\x48"),
        ("one zero", b"\x00"),
        ("02", b"\x02"),
        ("03", b"\x03"),
        ("02 03", b"\x02\x03"),
        ("01 to 05", b"\x01\x02\x03\x04\x05"),
        ("05 to 01", b"\x05\x04\x03\x02\x01"),
        ("02 42", b"\x02\x42"),
        ("02 41 43", b"\x02\x41\x43"),
        ("02 02 03 03", b"\x02\x02\x03\x03"),
        ("COBS codes of 02 and 03", b"\x11\x00\x11\x22\x00\x11\x00"),
        ("32 bytes of 03", b"\x03" * 32),
        ("32 zeros", bytes(32)),
        ("every byte from 00 to fb", bytes(range(252))),
        ("longest, no zero", bytes(range(1, 253))),
        ("body and CRC of 254 bytes", bytes(range(1, 251))),
        ("body and CRC of 255 bytes", bytes(range(1, 252))),
    ]
    for length in (63, 64, 65, 128):
        bodies.append((f"frame of {length} bytes both ways", _body_for(length)))
        bodies.append((f"frame of {length} bytes toward the device", _escaped_body_for(length)))
    return {
        "about": "A frame is COBS(body + CRC-32 little endian) + 00; toward the device 01 to 05 "
        "become 02 and then 41 to 45. All bytes as hex. In 'streams' the items are what a "
        "decoder of that direction and limit yields, in order, and 'pending' what it keeps.",
        "crc32": [
            {"data": b"123456789".hex(), "crc": 0xCBF43926, "source": "CRC catalogue, ISO-HDLC"},
            {"data": "", "crc": 0, "source": "zlib"},
        ],
        "frames": [
            {
                "name": name,
                "body": content.hex(),
                "to_device": frame(content, True).hex(),
                "to_host": frame(content, False).hex(),
            }
            for name, content in bodies
        ],
        "streams": streams(),
    }


def streams() -> list[dict[str, Any]]:
    first, second = b"first\x00\x02\x03", b"second\x03\x02\x00"
    out: list[dict[str, Any]] = []

    def add(
        name: str,
        toward_device: bool,
        data: bytes,
        items: list[bytes | tuple[str, bytes]],
        pending: bytes = b"",
        limit: int = 516,
    ) -> None:
        out.append(
            {
                "name": name,
                "toward_device": toward_device,
                "limit": limit,
                "bytes": data.hex(),
                "items": [
                    {"body": item.hex()}
                    if isinstance(item, bytes)
                    else {"bad": item[0], "raw": item[1].hex()}
                    for item in items
                ],
                "pending": pending.hex(),
            }
        )

    for toward_device in (True, False):
        way = "toward the device" if toward_device else "toward the host"
        one, two = frame(first, toward_device), frame(second, toward_device)
        crc = struct.pack("<I", zlib.crc32(first) ^ 0x400)
        wrong_crc = cobs.encode(b"first" + bytes([9, 8, 6]) + crc)
        empty = frame(b"", toward_device)
        add(f"two frames {way}", toward_device, one + two, [first, second])
        add(f"delimiters alone {way}", toward_device, bytes(4), [])
        add(
            f"delimiters between {way}",
            toward_device,
            b"\x00" + one + bytes(3) + two,
            [first, second],
        )
        add(f"unfinished {way}", toward_device, one + two[:-1], [first], two[:-1])
        add(
            f"wrong CRC {way}",
            toward_device,
            wrong_crc + b"\x00" + two,
            [("crc", wrong_crc), second],
        )
        add(
            f"CRC of nothing {way}", toward_device, empty + two, [("too short", empty[:-1]), second]
        )
        nothing = b"\x02A" if toward_device else b"\x01"
        add(
            f"one byte {way}",
            toward_device,
            nothing + b"\x00" + two,
            [("too short", nothing), second],
        )
        add(
            f"block cut short {way}",
            toward_device,
            b"\x09abc\x00" + two,
            [("cobs", b"\x09abc"), second],
        )
        add(
            f"short write, ended by a delimiter {way}",
            toward_device,
            one[:5] + b"\x00" + two,
            [("cobs", one[:5]), second],
        )
        add(
            f"short write after a whole block {way}",
            toward_device,
            one[:6] + b"\x00" + two,
            [("crc", one[:6]), second],
        )
        add(
            f"garbage takes one frame with it {way}",
            toward_device,
            b"\xa5\x5a" + one + two,
            [("cobs", b"\xa5\x5a" + one[:-1]), second],
        )
        add(
            f"longer than the limit {way}",
            toward_device,
            b"x" * 33 + b"\x00" + two,
            [("too long", b"x" * 32), second],
            limit=32,
        )
        add(
            f"exactly the limit {way}",
            toward_device,
            b"x" * 32 + b"\x00" + two,
            [("cobs", b"x" * 32), second],
            limit=32,
        )
        prompt = b"\r\nMicroPython v1.29.0\r\n>>> "
        add(f"a prompt {way}", toward_device, prompt + b"\x00" + two, [("cobs", prompt), second])
    for name, run in (
        ("02 alone", b"\x06ab\x02"),
        ("02 and nothing that it may mark", b"\x06a\x02\x46b"),
        ("02 twice, then 42", b"\x06a\x02\x02\x42"),
        ("01 not escaped", b"\x06a\x01b"),
        ("03 not escaped", b"\x06a\x03b"),
        ("04 not escaped", b"\x06a\x04b"),
        ("05 not escaped", b"\x06a\x05b"),
    ):
        add(name, True, run + b"\x00" + frame(second, True), [("escape", run), second])
    return out


def _session_of(name: str) -> tuple[int, int]:
    if name == "hello":
        return NO_SESSION, HELLO_SEQUENCE
    if name == "abort":
        return SESSION, 0
    return SESSION, 0x00020300 + len(name)


def messages_vectors() -> dict[str, Any]:
    golden = []
    for kind, (name, direction, *_) in catalogue.MESSAGES.items():
        session, sequence = _session_of(name)
        content = body(name, session, sequence, EXAMPLES[name])
        golden.append(
            {
                "name": name,
                "kind": kind,
                "session": session,
                "sequence": sequence,
                "values": plain(EXAMPLES[name]),
                "body": content.hex(),
                "frame": frame(content, direction == catalogue.TO_DEVICE).hex(),
            }
        )
    fire = body("fire", SESSION, 515, EXAMPLES["fire"])
    block = body("block", SESSION, 515, EXAMPLES["block"])
    profile = body("profile", SESSION, 515, EXAMPLES["profile"])
    raw_block = body("raw_block", SESSION, 515, EXAMPLES["raw_block"])
    refused = [
        ("nothing", b"", 2, 0, 0, 0),
        ("header cut short", fire[:8], 2, 0x21, 0, 0),
        ("unknown kind", b"\x7e" + fire[1:], 1, 0x7E, SESSION, 515),
        ("field cut short", fire[:-1], 2, 0x21, SESSION, 515),
        ("no field at all", fire[:9], 2, 0x21, SESSION, 515),
        ("fewer knots than announced", block[:-1], 2, 0xE1, SESSION, 515),
        ("fewer bytes than announced", profile[:-1], 2, 0x91, SESSION, 515),
        ("length cut in two", profile[:10], 2, 0x91, SESSION, 515),
        ("fewer raw pairs than announced", raw_block[:-1], 2, 0xE3, SESSION, 515),
    ]
    return {
        "about": "One body of every message, and its frame in the direction that it travels. All "
        "integers are exact, up to 64 bits; byte fields and knot records as hex. A body with more "
        "bytes at its end is the same message.",
        "fingerprint": fingerprint(),
        "knots": [
            {"values": values, "bytes": data.hex()}
            for values, data in zip(KNOTS, KNOT_BYTES, strict=True)
        ],
        "messages": golden,
        "refused": [
            {
                "name": name,
                "body": data.hex(),
                "code": code,
                "kind": kind,
                "session": session,
                "sequence": sequence,
            }
            for name, data, code, kind, session, sequence in refused
        ],
    }


def profile_vectors() -> dict[str, Any]:
    record = rows_of(profile_record.PROFILE, PROFILE)
    sealed = record + struct.pack("<I", zlib.crc32(record))
    return {
        "about": "The profile record, and as it stands in a file: followed by its CRC-32.",
        "values": plain(PROFILE),
        "record": record.hex(),
        "sealed": sealed.hex(),
        "bad_records": [
            {"name": "nothing", "record": ""},
            {"name": "cut short", "record": record[:-1].hex()},
            {"name": "name longer than the record", "record": record[:1].hex() + "ff41"},
            {"name": "the format before", "record": "01" + record[1:].hex()},
            {"name": "a later format", "record": "04" + record[1:].hex()},
            {"name": "name is not UTF-8", "record": (record[:2] + b"\xff" + record[3:]).hex()},
        ],
        "bad_files": [
            {"name": "nothing", "file": ""},
            {"name": "CRC alone", "file": "00000000"},
            {"name": "no CRC", "file": record.hex()},
            {
                "name": "one bit flipped",
                "file": (sealed[:5] + bytes([sealed[5] ^ 1]) + sealed[6:]).hex(),
            },
        ],
    }


def catalogue_vectors() -> dict[str, Any]:
    """The tables themselves, so that a device or a host of this version can be built later."""
    return {
        "about": "The catalogue of this version as data: what is needed to play one side of it.",
        "protocol": list(PROTOCOL),
        "fingerprint": fingerprint(),
        "header": [list(row) for row in catalogue.HEADER],
        "knot": [list(row) for row in catalogue.KNOT],
        "messages": [
            {
                "kind": kind,
                "name": name,
                "to_device": direction == catalogue.TO_DEVICE,
                "frozen": frozen,
                "changes": changes,
                "fields": [list(row) for row in rows],
            }
            for kind, (name, direction, frozen, changes, rows) in catalogue.MESSAGES.items()
        ],
    }


FILES = {
    "cobs.json": cobs_vectors,
    "framing.json": framing_vectors,
    "messages.json": messages_vectors,
    "profile.json": profile_vectors,
    "catalogue.json": catalogue_vectors,
}


def written(name: str) -> str:
    """The text of one vector file."""
    return json.dumps(FILES[name](), indent=1) + "\n"


def main() -> None:
    """Write the files; with a version as argument also freeze them in a folder of its name."""
    folders = [VECTORS]
    for version in sys.argv[1:]:
        folders.append(VECTORS / version)
        if folders[-1].exists():
            raise SystemExit(f"{version} is frozen already; a released version never changes")
        folders[-1].mkdir()
    for folder in folders:
        for file_name in FILES:
            (folder / file_name).write_text(written(file_name), encoding="ascii")


if __name__ == "__main__":
    main()
