"""Checks of F on a device: what it takes for a frame, and what garbage costs.

Malformed runs are put together here byte by byte. No bare 03 among them: that one interrupts,
and belongs to `device_prompt.py`.
"""

from __future__ import annotations

import random
from collections.abc import Callable, Iterator

from conformance.bench import Bench, hello_body
from conformance.checks import Check
from conformance.report import Broken, Unseen
from kneewire import framing
from kneewire.messages import pack
from kneewire.seam import cobs_encode, crc32

TAKEN = (0x01, 0x04, 0x05)  # what a device must not take bare; 03 it never sees
ROUNDS = 12
LONG_RUN = 5000
# Nobody reads for so long. The RP2 port gives a write up after 0.5 s: these two end in the wait
# for a frame and in that for the delimiter before it.
STALLED_S = (0.7, 1.2)
STALL_BATCHES = 14
STALL_REQUESTS = 8


def sealed(body: bytes) -> bytes:
    """A body and its CRC, coded by COBS; neither escaped nor closed."""
    return cobs_encode(body + crc32(body).to_bytes(4, "little"))


def escaped(coded: bytes, *, but: int = -1) -> bytes:
    """01 to 05 escaped one by one, but for the byte value `but`."""
    out = bytearray()
    for byte in coded:
        if 1 <= byte <= 5 and byte != but:
            out += bytes([2, 0x40 + byte])
        else:
            out.append(byte)
    return bytes(out)


def holding(bench: Bench, wanted: Callable[[bytes], bool]) -> tuple[int, bytes]:
    """A heartbeat whose coded bytes are as wanted: its sequence and those bytes."""
    for _ in range(5000):
        number, body = bench.heartbeat(bench.session)
        if wanted(sealed(body)):
            return number, sealed(body)
    raise Unseen("no heartbeat has such bytes")


def behind_the_first(value: int) -> Callable[[bytes], bool]:
    return lambda coded: value in coded[1:]


def unanswered(bench: Bench, runs: Iterator[tuple[str, int, bytes]]) -> None:
    """Each run must be taken for no frame; what comes behind must be answered."""
    for what, number, run in runs:
        frames = bench.answers(framing.GUARD + run + framing.DELIMITER)
        if any(frame.sequence == number for frame in frames):
            raise Broken(f"an answer to a run with {what}")
        if frames:
            raise Broken(f"{frames[0]} behind a run with {what}")


def escapes_are_undone(bench: Bench) -> str:
    for value in range(1, 6):
        number, coded = holding(bench, behind_the_first(value))
        frame = bench.answer(framing.GUARD + escaped(coded) + framing.DELIMITER)
        if frame.sequence != number:
            raise Broken(f"sequence {frame.sequence:08x} for {number:08x}, sent with 02 4{value}")
    return "each of the five was undone"


def bare_bytes_are_refused(bench: Bench) -> str:
    def runs() -> Iterator[tuple[str, int, bytes]]:
        for value in TAKEN:
            number, coded = holding(bench, behind_the_first(value))
            yield f"a bare {value:02x}", number, escaped(coded, but=value)
        number, coded = holding(bench, lambda coded: 2 in coded[1:-1])
        yield "a bare 02", number, escaped(coded, but=2)
        for second in (0x40, 0x46, 0x61, 0x23):
            number, coded = holding(bench, behind_the_first(4))
            wrong = escaped(coded).replace(b"\x02\x44", bytes([2, second]), 1)
            yield f"02 {second:02x}", number, wrong
        number, coded = holding(bench, lambda coded: True)
        yield "02 at its end", number, escaped(coded) + b"\x02"

    unanswered(bench, runs())
    return "none of them was answered"


def no_frames() -> dict[str, bytes]:
    """A run of each kind that is no frame, escaped for the way to a device."""
    body = pack("heartbeat", 0x11223344, 7)
    coded = bytearray(sealed(body))
    coded[-1] ^= 0x10
    return {
        "a wrong CRC": escaped(bytes(coded)),
        "a COBS code that leads past the end": b"\xf0" + b"abc",
        "a CRC and no body": escaped(sealed(b"")),
        "two bytes": b"ab",
        "a wrong escape": b"ab\x02zcd",
        "600 bytes": b"z" * 600,
        "text": b"print('hello')\r\n",
    }


def garbage_costs_one_frame(bench: Bench) -> str:
    for what, run in no_frames().items():
        unanswered(bench, iter([(what, -1, run)]))
        _survives(bench, run, what)
    for cut in (1, 5, 12):
        _, body = bench.heartbeat(bench.session)
        frame = framing.encode(body, True)
        _survives(bench, frame[:cut], f"a frame cut after {cut} bytes")
        _survives(bench, frame[:cut] + b"~" + frame[cut:], f"a byte too many at {cut}")
    source = random.Random(5)
    for number in range(ROUNDS):
        noise = bytes(source.choice(range(256)) for _ in range(source.randrange(1, 150)))
        _survives(bench, noise.replace(b"\x03", b"\x30"), f"noise {number}")
    return "what came behind was received"


def _survives(bench: Bench, garbage: bytes, what: str) -> None:
    """Of two requests right behind garbage the second is answered, the first at most lost."""
    first, second = bench.heartbeat(bench.session), bench.heartbeat(bench.session)
    raw = garbage + framing.encode(first[1], True) + framing.encode(second[1], True)
    heard = [frame.sequence for frame in bench.answers(raw, guard=False)]
    if second[0] not in heard:
        raise Broken(f"two requests lost behind {what}")
    if garbage[-1:] == framing.DELIMITER and first[0] not in heard:
        raise Broken(f"a request lost behind {what} and a delimiter")


def empty_runs_do_not_count(bench: Bench) -> str:
    before = bench.counts()
    bench.send(5 * framing.DELIMITER + 5 * framing.GUARD + 3 * framing.DELIMITER)
    after = bench.counts()
    if after[1] != before[1]:
        raise Broken(f"{after[1] - before[1]} frames counted as bad")
    if after[0] > before[0] + 2:  # a heartbeat, and the second request for the status
        raise Broken(f"{after[0] - before[0] - 2} frames too many counted as good")
    return "ignored, and not counted"


def a_long_run_is_bounded(bench: Bench) -> str:
    bench.send(b"y" * LONG_RUN)
    if bench.answers(framing.DELIMITER):
        raise Broken("an answer to a long run")
    return f"{LONG_RUN} bytes without a delimiter did no harm"


def the_longest_frame_is_taken(bench: Bench) -> str:
    room = bench.device["max_frame"]
    if room < 64:
        raise Broken(f"max_frame {room}")
    head = pack("status", bench.session, 3)
    for size in (64, room):
        # 01 takes two bytes on the wire, so this is the longest coded form as well.
        tail = b"\x01" * (size - 4 - len(head))
        frame = bench.answer(framing.GUARD + escaped(sealed(head + tail)) + framing.DELIMITER)
        frame.reply("status_reply")
    return f"{room} bytes of body and CRC, {2 * room} on the wire"


def a_cut_frame_is_ended(bench: Bench) -> str:
    """Ask and do not read, until the device cannot write; then read on."""
    cut: list[framing.Bad] = []
    for stalled_s in STALLED_S:
        cut += cut_runs(bench, stalled_s)
    for run in cut:
        for start in range(1, len(run.raw)):
            if not isinstance(framing.decode_run(run.raw[start:], False), framing.Bad):
                raise Broken("a whole frame behind a cut one, without a delimiter between them")
    if not cut:
        raise Unseen("nothing the device wrote was cut short")
    return f"{len(cut)} frames cut, and what came behind them whole"


def cut_runs(bench: Bench, stalled_s: float) -> list[framing.Bad]:
    """What came cut short, after nobody had read for so long."""
    before = len(bench.bad)
    for _ in range(STALL_BATCHES):
        batch = b"".join(bench.frame("status", sequence=0) for _ in range(STALL_REQUESTS))
        try:
            bench.port.write(batch)
        except OSError:
            break  # the device takes no more either
        bench.port.sleep(0.02)
    bench.port.sleep(stalled_s)
    try:
        bench.listen(0.5)
        for tries_left in (2, 1, 0):
            try:
                bench.answers(framing.DELIMITER)
                break
            except Broken:
                if not tries_left:
                    raise
        return bench.bad[before:]
    finally:
        del bench.bad[before:]


def hello_at_once(bench: Bench) -> str:
    """Garbage before the first frame of all, and no guard."""
    bench.send(b"\xff\xfe~~~" + framing.DELIMITER)
    bench.send(framing.encode(hello_body(bench.nonce), True))
    frames = bench.listen(2.0, lambda frame: frame.name == "hello_reply")
    if not frames:
        raise Broken("no answer to a hello behind garbage")
    return "hello was answered"


CHECKS = (
    Check(
        "escapes are undone",
        ("F4",),
        "the answer to a request whose bytes 01 to 05 travel as 02 41 to 02 45",
        escapes_are_undone,
    ),
    Check(
        "a bare byte makes no frame",
        ("F5",),
        "no answer to a run with a bare 01, 04 or 05, or a 02 that is no escape",
        bare_bytes_are_refused,
    ),
    Check("garbage before hello", ("F6",), "an answer to what comes behind", hello_at_once),
    Check(
        "garbage costs one frame",
        ("F6",),
        "no answer to what is no frame, and at most one frame lost behind it",
        garbage_costs_one_frame,
    ),
    Check(
        "empty runs and guards",
        ("F7",),
        "runs of no byte and of 23 neither answered nor counted",
        empty_runs_do_not_count,
    ),
    Check(
        "a run without end", ("F8",), "a long run dropped, the next taken", a_long_run_is_bounded
    ),
    Check(
        "the longest frame",
        ("F3", "F8"),
        "frames of 64 and of max_frame bytes taken, however long their coded form",
        the_longest_frame_is_taken,
    ),
    Check(
        "nobody reads for a while",
        ("F9",),
        "a delimiter behind a frame that could not be written whole",
        a_cut_frame_is_ended,
    ),
)
