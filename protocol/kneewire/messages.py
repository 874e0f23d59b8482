"""Messages: a body from a name and values, and a message back from a body."""

import struct

from kneewire import catalogue, fields
from kneewire.seam import crc32

try:
    from typing import Any
except ImportError:  # MicroPython has no typing and does not evaluate annotations
    pass

HEADER_BYTES = 9
KNOT_BYTES = sum([fields.FIXED[row[1]][0] for row in catalogue.KNOT])
KNOTS_A_BLOCK = (catalogue.MAX_FRAME - HEADER_BYTES - 3 - 4) // KNOT_BYTES
RAW_BYTES = 4  # of a raw pair: the voltage's code and the current's, u16 each
RAW_A_BLOCK = (catalogue.MAX_FRAME - HEADER_BYTES - 4 - 4) // RAW_BYTES

NO_SESSION = 0xFFFFFFFF  # in a hello, and before there is a session


def fingerprint() -> int:
    """Of the catalogue: two sides with the same number speak the same messages.

    A CRC-32, but with the top bit of every byte set: a hello carries it, and a prompt acts on
    bytes below 0x20 but passes over those from 0x80.
    """
    crc = 0
    for line in catalogue.canonical_lines():
        crc = crc32(line.encode(), crc)
    return crc | 0x80808080


class Message:
    """One message: `name`, `session`, `sequence` and its `values` by field name."""

    __slots__ = ("name", "sequence", "session", "values")

    def __init__(self, name: str, session: int, sequence: int, values: "dict[str, Any]") -> None:
        self.name = name
        self.session = session
        self.sequence = sequence
        self.values = values

    def __getitem__(self, field: str) -> "Any":
        return self.values[field]

    def __repr__(self) -> str:
        inside = ", ".join(["%s=%r" % item for item in self.values.items()])
        return "%s(%s) session %d sequence %d" % (self.name, inside, self.session, self.sequence)


class Refused(Exception):
    """A body that is no message of this catalogue; `code` is one of REFUSALS."""

    def __init__(self, code: int, kind: int, session: int, sequence: int) -> None:
        super().__init__(catalogue.REFUSALS[code], kind)
        self.code = code
        self.kind = kind
        self.session = session
        self.sequence = sequence


def pack(name: str, session: int, sequence: int, values: "dict[str, Any] | None" = None) -> bytes:
    """The body of one message. KeyError for a missing value, ValueError for one out of range."""
    kind = catalogue.KINDS[name]
    out = bytearray()
    for place, value in enumerate((kind, session, sequence)):
        fields.write(out, catalogue.HEADER[place][1], value, KNOT_BYTES)
    for row in catalogue.MESSAGES[kind][4]:
        try:
            fields.write(out, row[1], (values or {})[row[0]], KNOT_BYTES)
        except ValueError as error:
            raise ValueError("%s.%s: %s" % (name, row[0], error)) from None
    return bytes(out)


# Types that `struct` knows; a message's other fields are read one by one.
_STRUCT = {"u8": "B", "u16": "H", "u32": "I", "u64": "Q", "i32": "i", "b8": "8s", "b16": "16s"}
_layouts: "dict[int, Any]" = {}
_BLOCK = catalogue.KINDS["block"]
_BLOCK_FORM = "<BIIHB"  # header, first, and the count of `data`; a test holds it to the catalogue
_DATA_AT = struct.calcsize(_BLOCK_FORM)


def _layout(kind: int) -> "Any":
    """Name, `struct` format, names of the fields that it covers, its size, the rows behind."""
    name, _, _, _, rows = catalogue.MESSAGES[kind]
    names = []
    form = "<BII"
    for row in rows:
        if row[1] not in _STRUCT:
            break
        form += _STRUCT[row[1]]
        names.append(row[0])
    made = (name, form, tuple(names), struct.calcsize(form), rows[len(names) :])
    _layouts[kind] = made
    return made


def unpack(body: bytes) -> Message:
    """The message in a body; extra bytes at its end are ignored. Raises `Refused`."""
    if len(body) < HEADER_BYTES:
        raise Refused(2, body[0] if body else 0, 0, 0)
    kind = body[0]
    if kind == _BLOCK and len(body) >= _DATA_AT:
        # A sweep is made of these, so they have a way of their own.
        _, session, sequence, first, count = struct.unpack_from(_BLOCK_FORM, body)
        after = _DATA_AT + count * KNOT_BYTES
        if after <= len(body):
            return Message(
                "block", session, sequence, {"first": first, "data": body[_DATA_AT:after]}
            )
    if kind not in catalogue.MESSAGES:
        raise Refused(1, kind, *struct.unpack_from("<II", body, 1))
    name, form, names, size, rows = _layouts.get(kind) or _layout(kind)
    if len(body) < size:
        raise Refused(2, kind, *struct.unpack_from("<II", body, 1))
    found = struct.unpack_from(form, body)
    values: dict[str, Any] = dict(zip(names, found[3:]))  # noqa: B905  # not on MicroPython
    place = size
    for row in rows:
        try:
            values[row[0]], place = fields.read(body, place, row[1], KNOT_BYTES)
        except ValueError:
            raise Refused(2, kind, found[1], found[2]) from None
    return Message(name, found[1], found[2], values)


def pack_knot(knot: "dict[str, int]") -> bytes:
    """One knot record."""
    out = bytearray()
    for row in catalogue.KNOT:
        fields.write(out, row[1], knot[row[0]], KNOT_BYTES)
    return bytes(out)


def unpack_knots(data: bytes) -> "list[dict[str, int]]":
    """Knot records as dictionaries; the host reads whole sweeps with numpy instead."""
    knots = []
    for start in range(0, len(data), KNOT_BYTES):
        knot: dict[str, int] = {}
        place = start
        for row in catalogue.KNOT:
            knot[row[0]], place = fields.read(data, place, row[1], KNOT_BYTES)
        knots.append(knot)
    return knots
