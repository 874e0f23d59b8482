"""A coder of its own for the golden vectors: struct, zlib, the `cobs` package and the tables.

From kneewire come the tables alone: nothing here calls its packers or its framing.
"""

from __future__ import annotations

import struct
import zlib
from typing import Any

from cobs import cobs

from kneewire import catalogue

ROWS = {name: rows for name, _, _, _, rows in catalogue.MESSAGES.values()}
STRUCT = {"u8": "<B", "u16": "<H", "u32": "<I", "u64": "<Q", "i32": "<i"}


# -- the coder ---------------------------------------------------------------------------


def field(kind: str, value: Any) -> bytes:
    if kind in STRUCT:
        return struct.pack(STRUCT[kind], value)
    if kind == "u48":
        return struct.pack("<Q", value)[:6]
    if kind in {"b8", "b16"}:
        return struct.pack(f"{kind[1:]}s", value)
    if kind == "text":
        return struct.pack("B", len(value.encode())) + value.encode()
    if kind == "bytes":
        return struct.pack("<H", len(value)) + value
    assert kind == "knots"
    return struct.pack("B", len(value) // 40) + value


def rows_of(rows: Any, values: dict[str, Any]) -> bytes:
    return b"".join(field(kind, values[name]) for name, kind in rows)


def body(name: str, session: int, sequence: int, values: dict[str, Any]) -> bytes:
    kind = next(kind for kind, row in catalogue.MESSAGES.items() if row[0] == name)
    return struct.pack("<BII", kind, session, sequence) + rows_of(ROWS[name], values)


def frame(content: bytes, toward_device: bool) -> bytes:
    coded = cobs.encode(content + struct.pack("<I", zlib.crc32(content)))
    if toward_device:
        out = bytearray()
        for byte in coded:
            out += bytes([2, 0x40 + byte]) if 1 <= byte <= 5 else bytes([byte])
        coded = bytes(out)
    return coded + b"\x00"
