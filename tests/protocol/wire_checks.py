"""Checks of kneewire that run alike on CPython and on MicroPython: vectors and seeds.

Each check yields (name, what is wrong or ""). The seeds draw bodies, streams and messages from
a generator in plain integers; both sides reduce all that comes out to one CRC.
"""

from kneewire import catalogue, framing, messages, profile_record, seam
from kneewire.fields import FIXED

unhex = bytes.fromhex


def shown(value):
    return value.hex() if isinstance(value, (bytes, bytearray)) else str(value)


def compared(name, found, expected):
    if found == expected:
        return name, ""
    return name, "found " + shown(found) + ", expected " + shown(expected)


def refusal_of(function, *given):
    """The name of what `function` raises, "" for nothing."""
    try:
        function(*given)
    except ValueError:
        return "ValueError"
    return ""


def from_json(rows, values):
    """Values as the codec takes them: hex to bytes."""
    out = {}
    for row in rows:
        value = values[row[0]]
        raw = row[1] in ("bytes", "knots") or (row[1] in FIXED and FIXED[row[1]][1] is None)
        out[row[0]] = unhex(value) if raw else value
    return out


# -- vectors -----------------------------------------------------------------------------


def check_cobs(vectors):
    coders = (
        ("pure", seam.pure_encode, seam.pure_decode),
        ("seam", seam.cobs_encode, seam.cobs_decode),
    )
    for coder, encode, decode in coders:
        for row in vectors["encode"]:
            name = "cobs, " + coder + ": " + row["name"]
            data, coded = unhex(row["data"]), unhex(row["coded"])
            yield compared(name + ", encoded", encode(data), coded)
            yield compared(name + ", decoded", decode(coded), data)
        for row in vectors["decode_only"]:
            name = "cobs, " + coder + ": " + row["name"]
            yield compared(name, decode(unhex(row["coded"])), unhex(row["data"]))
        for row in vectors["bad"]:
            name = "cobs, " + coder + ": " + row["name"]
            yield compared(name, refusal_of(decode, unhex(row["coded"])), "ValueError")


def items_as_json(items):
    out = []
    for item in items:
        if isinstance(item, framing.Bad):
            out.append({"bad": item.reason, "raw": item.raw.hex()})
        else:
            out.append({"body": item.hex()})
    return out


def check_framing(vectors):
    for row in vectors["crc32"]:
        yield compared("crc32 of " + row["data"], seam.crc32(unhex(row["data"])), row["crc"])
    for row in vectors["frames"]:
        body = unhex(row["body"])
        for toward_device, key in ((True, "to_device"), (False, "to_host")):
            name = "frame " + key + ": " + row["name"]
            frame = unhex(row[key])
            yield compared(name + ", encoded", framing.encode(body, toward_device), frame)
            decoder = framing.Decoder(len(frame) - 1, toward_device)
            yield compared(name + ", decoded", decoder.feed(frame), [body])
            yield compared(name + ", counted", (decoder.good, decoder.bad), (1, 0))
    for row in vectors["streams"]:
        data = unhex(row["bytes"])
        for size in (len(data), 1):
            decoder = framing.Decoder(row["limit"], row["toward_device"])
            items = []
            for start in range(0, len(data), size):
                items.extend(decoder.feed(data[start : start + size]))
            name = "stream in pieces of " + str(size) + ": " + row["name"]
            yield compared(name, items_as_json(items), row["items"])
            yield compared(name + ", pending", decoder.pending(), unhex(row["pending"]))


def refused_as(body):
    """(code, kind, session, sequence) of the refusal that `body` meets, None for a message."""
    try:
        messages.unpack(body)
    except messages.Refused as refused:
        return refused.code, refused.kind, refused.session, refused.sequence
    return None


def check_messages(vectors):
    yield compared("fingerprint", messages.fingerprint(), vectors["fingerprint"])
    for place, row in enumerate(vectors["knots"]):
        name = "knot " + str(place)
        data = unhex(row["bytes"])
        yield compared(name + ", packed", messages.pack_knot(row["values"]), data)
        yield compared(name + ", unpacked", messages.unpack_knots(data), [row["values"]])
    for row in vectors["messages"]:
        name = "message " + row["name"]
        kind = catalogue.KINDS[row["name"]]
        values = from_json(catalogue.MESSAGES[kind][4], row["values"])
        body = unhex(row["body"])
        made = messages.pack(row["name"], row["session"], row["sequence"], values)
        yield compared(name + ", packed", made, body)
        to_device = catalogue.MESSAGES[kind][1] == catalogue.TO_DEVICE
        yield compared(name + ", framed", framing.encode(body, to_device), unhex(row["frame"]))
        for tail in (b"", b"\x00", b"new field"):
            message = messages.unpack(body + tail)
            head = (message.name, message.session, message.sequence)
            yield compared(name + ", header", head, (row["name"], row["session"], row["sequence"]))
            yield compared(name + ", values", message.values, values)
    for row in vectors["refused"]:
        expected = (row["code"], row["kind"], row["session"], row["sequence"])
        yield compared("refused: " + row["name"], refused_as(unhex(row["body"])), expected)


def check_profile(vectors):
    values = from_json(profile_record.PROFILE, vectors["values"])
    record, sealed = unhex(vectors["record"]), unhex(vectors["sealed"])
    yield compared("profile packed", profile_record.pack_profile(values), record)
    yield compared("profile unpacked", profile_record.unpack_profile(record), values)
    yield compared("profile sealed", profile_record.seal(record), sealed)
    yield compared("profile unsealed", profile_record.unseal(sealed), record)
    for row in vectors["bad_records"]:
        found = refusal_of(profile_record.unpack_profile, unhex(row["record"]))
        yield compared("profile record: " + row["name"], found, "ValueError")
    for row in vectors["bad_files"]:
        found = refusal_of(profile_record.unseal, unhex(row["file"]))
        yield compared("profile file: " + row["name"], found, "ValueError")


CHECKS = {
    "cobs.json": check_cobs,
    "framing.json": check_framing,
    "messages.json": check_messages,
    "profile.json": check_profile,
}


# -- seeds -------------------------------------------------------------------------------


class Dice:
    """Xorshift with 32 bits (Marsaglia, Journal of Statistical Software 8 (2003) 14)."""

    def __init__(self, seed):
        self.state = seed

    def below(self, limit):
        state = self.state
        state ^= (state << 13) & 0xFFFFFFFF
        state ^= state >> 17
        state ^= (state << 5) & 0xFFFFFFFF
        self.state = state
        return (state >> 3) % limit

    def bytes(self, size):
        """Mostly arbitrary bytes, often only those that framing treats apart, or no zero."""
        style = self.below(3)
        if style == 0:
            return bytes([(0, 1, 2, 3, 4, 5, 255)[self.below(7)] for _ in range(size)])
        low = style - 1
        return bytes([low + self.below(256 - low) for _ in range(size)])

    def integer(self, size, signed):
        number = int.from_bytes(self.bytes(size), "little")
        if signed and number >> (8 * size - 1):
            number -= 1 << (8 * size)
        return number


def drawn_value(dice, kind):
    if kind == "knots":
        return dice.bytes(messages.KNOT_BYTES * dice.below(messages.KNOTS_A_BLOCK + 1))
    if kind == "bytes":
        return dice.bytes(dice.below(120))
    if kind == "text":
        return "".join(["aZ 09\u00fc\u20ac"[dice.below(7)] for _ in range(dice.below(30))])
    size, signed = FIXED[kind]
    return dice.bytes(size) if signed is None else dice.integer(size, signed)


def framed(dice, crc):
    """Bodies there and back in both directions, then as a damaged stream in random pieces."""
    toward_device = dice.below(2) == 1
    stream = b""
    for _ in range(1 + dice.below(4)):
        body = dice.bytes(1 + dice.below((40, 252)[dice.below(2)]))
        frame = framing.encode(body, toward_device)
        if framing.decode_run(frame[:-1], toward_device) != body:
            raise AssertionError("no way back: " + body.hex())
        stream += frame
    for _ in range(dice.below(4)):
        place = dice.below(len(stream))
        act = dice.below(3)
        put = dice.bytes(1) if act else b""
        stream = stream[:place] + put + stream[place + (act != 2) :]
    decoder = framing.Decoder((48, 516)[dice.below(2)], toward_device)
    place = 0
    while place < len(stream):
        size = 1 + dice.below(70)
        for item in decoder.feed(stream[place : place + size]):
            if isinstance(item, framing.Bad):
                crc = seam.crc32(item.raw, seam.crc32(item.reason.encode(), crc))
                crc = seam.crc32(item.text().encode(), crc)
            else:
                crc = seam.crc32(item, seam.crc32(b"body", crc))
        place += size
    return seam.crc32(decoder.pending(), crc)


def packed(dice, crc):
    """One message there and back, then cut short or with its kind changed."""
    kinds = sorted(catalogue.MESSAGES)
    name, _, _, _, rows = catalogue.MESSAGES[kinds[dice.below(len(kinds))]]
    values = {row[0]: drawn_value(dice, row[1]) for row in rows}
    session, sequence = dice.integer(4, False), dice.integer(4, False)
    body = messages.pack(name, session, sequence, values)
    message = messages.unpack(body + dice.bytes(dice.below(3)))
    if message.values != values or (message.session, message.sequence) != (session, sequence):
        raise AssertionError("no way back: " + body.hex())
    crc = seam.crc32(body, crc)
    cut = body[: dice.below(len(body) + 1)]
    if dice.below(4) == 0:
        cut = dice.bytes(1) + cut[1:]
    return seam.crc32(str(refused_as(cut)).encode(), crc)


def profiled(dice, crc):
    values = {row[0]: drawn_value(dice, row[1]) for row in profile_record.PROFILE}
    values["format"] = profile_record.FORMAT
    record = profile_record.pack_profile(values)
    if profile_record.unpack_profile(record) != values:
        raise AssertionError("no way back: " + record.hex())
    return seam.crc32(profile_record.seal(record), crc)


def seed_crcs(seeds):
    """The CRC of all results so far, after every seed: the first that differs tells the seed."""
    crc = 0
    out = []
    for seed in range(1, seeds + 1):
        dice = Dice(seed * 0x9E3779B1 & 0xFFFFFFFF)
        crc = framed(dice, crc)
        crc = packed(dice, crc)
        if seed % 4 == 0:
            crc = profiled(dice, crc)
        out.append(crc)
    return out
