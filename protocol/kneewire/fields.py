"""Field types of the wire: how each is written and read. Little endian throughout.

A type is one of the names in `FIXED`, or "text" (u8 length, UTF-8), "bytes" (u16 length) or
"knots" (u8 count, then that many knot records as raw bytes).
"""

try:
    from typing import Any
except ImportError:  # MicroPython has no typing and does not evaluate annotations
    pass

# name: (bytes, signed); "b8" and "b16" are raw bytes of that length.
FIXED = {
    "u8": (1, False),
    "u16": (2, False),
    "u32": (4, False),
    "u48": (6, False),
    "u64": (8, False),
    "i32": (4, True),
    "b8": (8, None),
    "b16": (16, None),
}


def bounds(kind: str) -> "tuple[int, int]":
    """Least and greatest integer that a field of this type holds."""
    size, signed = FIXED[kind]
    if signed:
        return -(1 << (8 * size - 1)), (1 << (8 * size - 1)) - 1
    return 0, (1 << (8 * size)) - 1


def write(out: bytearray, kind: str, value: "Any", unit_bytes: int) -> None:
    """Append `value`; ValueError where it does not fit. `unit_bytes` is a knot's size."""
    if kind in FIXED:
        size, signed = FIXED[kind]
        if signed is None:
            if len(value) != size:
                raise ValueError("length")
            out.extend(value)
            return
        low, high = bounds(kind)
        if not low <= value <= high:
            raise ValueError("range")
        # MicroPython's to_bytes takes no signed=, so negatives go in as two's complement.
        out.extend((value & ((1 << (8 * size)) - 1)).to_bytes(size, "little"))
    elif kind == "text":
        data = value.encode()
        if len(data) > 255:
            raise ValueError("length")
        out.append(len(data))
        out.extend(data)
    elif kind == "bytes":
        if len(value) > 65535:
            raise ValueError("length")
        out.extend(len(value).to_bytes(2, "little"))
        out.extend(value)
    elif kind == "knots":
        count, over = divmod(len(value), unit_bytes)
        if over or count > 255:
            raise ValueError("length")
        out.append(count)
        out.extend(value)
    else:
        raise ValueError("type")


def read(data: bytes, place: int, kind: str, unit_bytes: int) -> "tuple[Any, int]":
    """The value at `place` and the place after it; ValueError where `data` ends too early."""
    if kind in FIXED:
        size, signed = FIXED[kind]
        after = place + size
    elif kind == "text":
        size, signed = 0, None
        after = place + 1 + (data[place] if place < len(data) else 0)
        place += 1
    elif kind == "bytes":
        size, signed = 0, None
        after = place + 2 + int.from_bytes(data[place : place + 2], "little")
        place += 2
    elif kind == "knots":
        size, signed = 0, None
        after = place + 1 + (data[place] if place < len(data) else 0) * unit_bytes
        place += 1
    else:
        raise ValueError("type")
    if after > len(data) or place > len(data):
        raise ValueError("short")
    piece = data[place:after]
    if kind == "text":
        return str(piece, "utf-8"), after
    if signed is None:
        return piece, after
    number = int.from_bytes(piece, "little")
    if signed and number >> (8 * size - 1):
        number -= 1 << (8 * size)
    return number, after
