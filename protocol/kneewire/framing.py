"""Frames: COBS(body + CRC-32) + 0x00, and the decoder that survives any bytes.

Bytes that travel toward the device never contain 0x03: on the RP2 port of MicroPython that
byte is Ctrl-C and empties the input ring. Should a damaged byte become one all the same, the rest
of the frame arrives at a prompt, where 01 and 05 change its mode and 04 resets the board. So
after COBS, in that direction only, 01 to 05 become 02 followed by 41 to 45.
"""

from kneewire.seam import CobsErrors, cobs_encode, crc32, run_decode

DELIMITER = b"\x00"
# Before each frame toward the device: should a MicroPython prompt be there in the firmware's
# place, "#" makes the line a comment, and a line that is not empty takes no control byte for an
# order. A decoder ignores a run of this byte alone.
LONE_GUARD = b"#"
GUARD = LONE_GUARD + DELIMITER
CRC_BYTES = 4
# What the CRC over a body and its CRC always is: the residue of CRC-32/ISO-HDLC in the CRC
# catalogue, debb20e3, after the final exclusive or.
CRC_RESIDUE = 0x2144DF1C

# 02 comes first: what stands for the others holds it.
ESCAPED = ((b"\x02", b"\x02B"), (b"\x01", b"\x02A"), (b"\x03", b"\x02C")) + (
    (b"\x04", b"\x02D"),
    (b"\x05", b"\x02E"),
)

# Why a run of bytes between delimiters is not a frame.
BAD_LONG = "too long"
BAD_ESCAPE = "escape"
BAD_COBS = "cobs"
BAD_SHORT = "too short"
BAD_CRC = "crc"


def encode(body: bytes, toward_device: bool) -> bytes:
    """One whole frame, delimiter included."""
    coded = cobs_encode(body + crc32(body).to_bytes(CRC_BYTES, "little"))
    if toward_device:
        for plain, escaped in ESCAPED:
            coded = coded.replace(plain, escaped)
    return coded + DELIMITER


class Bad:
    """Bytes between two delimiters that are no frame, and why; `raw` may be cut short."""

    def __init__(self, reason: str, raw: bytes) -> None:
        self.reason = reason
        self.raw = raw

    def text(self) -> str:
        """The raw bytes as people read them, where they are mostly readable, else ""."""
        return readable(self.raw)


def readable(raw: bytes) -> str:
    """`raw` as text where at least 90 % of it is printable ASCII (a prompt, a traceback).

    A prompt that echoes in mid-line moves its cursor back (08) after each character.
    """
    good = [chr(byte) for byte in raw if 32 <= byte < 127 or byte in (9, 10, 13)]
    if not raw or (len(good) + raw.count(b"\x08")) * 10 < len(raw) * 9:
        return ""
    return "".join(good)


def decode_run(run: bytes, toward_device: bool) -> "bytes | Bad":
    """The body inside one run of bytes between delimiters, or why there is none."""
    coded = run
    if toward_device:
        marks = run.count(b"\x02")
        for plain, escaped in reversed(ESCAPED):
            marks -= run.count(escaped)
            if plain in run and plain != b"\x02":
                return Bad(BAD_ESCAPE, run)
            coded = coded.replace(escaped, plain)
        if marks:
            return Bad(BAD_ESCAPE, run)
    try:
        whole = run_decode(coded)
    except CobsErrors:
        return Bad(BAD_COBS, run)
    if len(whole) <= CRC_BYTES:
        return Bad(BAD_SHORT, run)
    if crc32(whole) != CRC_RESIDUE:
        return Bad(BAD_CRC, run)
    return whole[:-CRC_BYTES]


class Decoder:
    """Turns any stream of bytes into bodies and `Bad` runs; never raises, never grows.

    `limit` bounds the coded bytes kept of one run. `good` and `bad` count what was yielded.
    """

    def __init__(self, limit: int, toward_device: bool) -> None:
        self.limit = limit
        self.toward_device = toward_device
        self.good = 0
        self.bad = 0
        self._run = bytearray()
        self._overflow = False

    def pending(self) -> bytes:
        """Bytes since the last delimiter."""
        return bytes(self._run)

    def feed(self, data: bytes) -> "list[bytes | Bad]":
        """What `data` completes, in order."""
        out: list[bytes | Bad] = []
        runs = data.split(DELIMITER)
        unfinished = runs.pop()
        toward_device = self.toward_device
        for run in runs:
            whole = self._whole(run) if self._run or len(run) > self.limit else run
            if self._overflow:
                self._overflow = False
                out.append(Bad(BAD_LONG, whole))
            elif whole and whole != LONE_GUARD:
                out.append(decode_run(whole, toward_device))
        bad = sum([isinstance(item, Bad) for item in out])
        self.bad += bad
        self.good += len(out) - bad
        self._keep(unfinished)
        return out

    def _whole(self, piece: bytes) -> bytes:
        """The run that `piece` ends, as far as it is kept."""
        self._keep(piece)
        whole = bytes(self._run)
        self._run = bytearray()
        return whole

    def _keep(self, piece: bytes) -> None:
        room = self.limit - len(self._run)
        if len(piece) > room:
            self._overflow = True
            piece = piece[:room]
        self._run.extend(piece)


def coded_limit(body_and_crc: int, toward_device: bool) -> int:
    """Room for the coded run (delimiter apart) of a body and CRC of that many bytes together."""
    cobs = body_and_crc + body_and_crc // 254 + 1
    return 2 * cobs if toward_device else cobs
