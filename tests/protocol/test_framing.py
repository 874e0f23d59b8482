"""Frames survive any link: no byte is trusted, none is lost without being told."""

from __future__ import annotations

import struct
import zlib

import pytest
from cobs import cobs
from hypothesis import example, given, settings
from hypothesis import strategies as st

from kneewire import catalogue, framing, seam
from kneewire.framing import Bad, Decoder, coded_limit, decode_run, encode, readable

LIMIT = coded_limit(catalogue.MAX_FRAME, True)
LONGEST_BODY = catalogue.MAX_FRAME - framing.CRC_BYTES

# Bytes that framing treats apart come up often, so that escapes and block ends meet.
telling = st.sampled_from([0, 1, 2, 3, 4, 5, 6, 0xFE, 0xFF])
any_byte = st.one_of(telling, st.integers(0, 255))
loose = st.lists(any_byte, max_size=60).map(bytes)
bodies = st.one_of(
    st.lists(any_byte, min_size=1, max_size=40).map(bytes),
    st.binary(min_size=1, max_size=LONGEST_BODY),
    # Runs without zeros, of lengths about one COBS block.
    st.integers(245, LONGEST_BODY).map(
        lambda size: bytes(1 + place % 255 for place in range(size))
    ),
)
both_ways = pytest.mark.parametrize("toward_device", [True, False], ids=["to device", "to host"])
at_length = settings(max_examples=200, deadline=None)
shortly = settings(max_examples=60, deadline=None)


def told(items: list[bytes | Bad]) -> list[tuple[str, bytes]]:
    return [(item.reason, item.raw) if isinstance(item, Bad) else ("", item) for item in items]


def decoded(stream: bytes, toward_device: bool, limit: int = LIMIT) -> list[tuple[str, bytes]]:
    return told(Decoder(limit, toward_device).feed(stream))


# -- codes -------------------------------------------------------------------------------


@pytest.mark.clause("F2")
def test_crc_is_the_catalogued_one() -> None:
    # CRC catalogue: CRC-32/ISO-HDLC of "123456789" is CBF43926; zlib has it too.
    assert seam.crc32(b"123456789") == 0xCBF43926 == zlib.crc32(b"123456789")
    body = b"123456789"
    assert cobs.decode(encode(body, False)[:-1]) == body + bytes.fromhex("2639f4cb")


@pytest.mark.parametrize(
    ("data", "coded"),
    [
        # Cheshire and Baker 1999; checked against the `cobs` package.
        ("", "01"),
        ("00", "0101"),
        ("0000", "010101"),
        ("001100", "01021101"),
        ("11220033", "0311220233"),
        ("11223344", "0511223344"),
        ("11000000", "0211010101"),
        (bytes(range(1, 255)).hex(), "ff" + bytes(range(1, 255)).hex()),
        (bytes(range(1, 256)).hex(), "ff" + bytes(range(1, 255)).hex() + "02ff"),
    ],
)
@pytest.mark.clause("F1")
def test_cobs_is_the_published_one(data: str, coded: str) -> None:
    for encoder in (seam.pure_encode, seam.cobs_encode):
        assert encoder(bytes.fromhex(data)).hex() == coded


@at_length
@given(st.one_of(loose, st.binary(max_size=600), st.integers(250, 520).map(lambda n: b"\x07" * n)))
def test_both_cobs_coders_agree_on_data(data: bytes) -> None:
    coded = seam.pure_encode(data)
    assert coded == seam.cobs_encode(data)
    assert 0 not in coded
    assert seam.pure_decode(coded) == data == seam.cobs_decode(coded)


@at_length
@given(st.one_of(loose, st.lists(st.integers(1, 8), max_size=40).map(bytes)))
@example(b"\xff" + b"\x07" * 254 + b"\x01")
@example(b"\xff" + b"\x07" * 254)
@example(b"\xff" + b"\x07" * 253)
def test_both_cobs_coders_agree_on_any_run(run: bytes) -> None:
    answers: list[bytes | None] = []
    for decoder in (seam.pure_decode, seam.cobs_decode):
        try:
            answers.append(decoder(run))
        except ValueError:
            answers.append(None)
    assert answers[0] == answers[1]


# -- one frame ---------------------------------------------------------------------------


@both_ways
@at_length
@given(body=bodies)
def test_what_is_encoded_comes_back(toward_device: bool, body: bytes) -> None:
    frame = encode(body, toward_device)
    assert frame.endswith(framing.DELIMITER)
    assert frame.count(framing.DELIMITER) == 1
    assert len(frame) - 1 <= coded_limit(len(body) + framing.CRC_BYTES, toward_device)
    assert decode_run(frame[:-1], toward_device) == body


@at_length
@given(body=bodies)
@example(body=b"\x02\x03" * 60)
@example(body=b"\x03" * LONGEST_BODY)
@pytest.mark.clause("F4")
def test_nothing_toward_the_device_is_a_ctrl_c(body: bytes) -> None:
    assert 3 not in encode(body, True)


def test_escaping_costs_little_on_arbitrary_bytes() -> None:
    # 2 of 256 bytes grow by one: 0.8 % on the mean.
    frames = [
        bytes((7 * place * place + seed) % 256 for place in range(120)) for seed in range(256)
    ]
    plain = sum(len(encode(body, False)) for body in frames)
    escaped = sum(len(encode(body, True)) for body in frames)
    assert 1.0 < escaped / plain < 1.02


@both_ways
def test_every_single_bit_that_flips_is_noticed(toward_device: bool) -> None:
    frame = encode(b"\x21\x02\x03\x00armed", toward_device)
    for bit in range(8 * (len(frame) - 1)):
        damaged = bytearray(frame)
        damaged[bit // 8] ^= 1 << bit % 8
        items = decoded(bytes(damaged), toward_device)
        assert items, bit
        assert all(reason for reason, _ in items), bit


def test_a_longest_body_fits_the_limit_that_the_device_keeps() -> None:
    for body in (bytes(LONGEST_BODY), b"\x02\x00" * (LONGEST_BODY // 2), b"\x03" * LONGEST_BODY):
        assert decoded(encode(body, True), True) == [("", body)]


# -- streams -----------------------------------------------------------------------------


@st.composite
def streams(draw: st.DrawFn, toward_device: bool) -> bytes:
    """Frames, damaged frames, garbage and text in any order."""
    parts = draw(
        st.lists(
            st.one_of(
                loose,
                st.lists(any_byte, min_size=1, max_size=12).map(
                    lambda body: encode(bytes(body), toward_device)
                ),
                st.just(b">>> "),
                st.just(b"\x00"),
                st.integers(2, 9).map(lambda cut: encode(b"cut short", toward_device)[:cut]),
            ),
            max_size=6,
        )
    )
    return b"".join(parts)


@both_ways
@shortly
@given(data=st.data())
@pytest.mark.clause("F6")
def test_a_stream_split_anywhere_gives_the_same_items(
    toward_device: bool, data: st.DataObject
) -> None:
    stream = data.draw(streams(toward_device))
    limit = data.draw(st.sampled_from([8, 24, LIMIT]))
    whole = Decoder(limit, toward_device)
    expected = told(whole.feed(stream))
    for place in range(len(stream) + 1):
        split = Decoder(limit, toward_device)
        items = split.feed(stream[:place]) + split.feed(stream[place:])
        assert told(items) == expected
        assert split.pending() == whole.pending()
        assert (split.good, split.bad) == (whole.good, whole.bad)
    bytewise = Decoder(limit, toward_device)
    items = [item for byte in stream for item in bytewise.feed(bytes([byte]))]
    assert told(items) == expected


@both_ways
@at_length
@given(
    pieces=st.lists(st.one_of(loose, st.binary(max_size=300)), max_size=8),
    limit=st.integers(0, 300),
)
@pytest.mark.clause("F8")
def test_no_stream_raises_or_makes_the_decoder_grow(
    toward_device: bool, pieces: list[bytes], limit: int
) -> None:
    decoder = Decoder(limit, toward_device)
    counted = 0
    for piece in pieces:
        for item in decoder.feed(piece):
            counted += 1
            assert len(item.raw if isinstance(item, Bad) else item) <= limit
        assert len(decoder.pending()) <= limit
    assert counted == decoder.good + decoder.bad
    # Every run that is not empty is told, as a body or as bad.
    runs = b"".join(pieces).split(framing.DELIMITER)[:-1]
    assert counted == len([run for run in runs if run])


@both_ways
@at_length
@given(
    garbage=st.one_of(loose, st.binary(max_size=1200)),
    sent=st.lists(bodies, min_size=1, max_size=4),
)
def test_garbage_costs_at_most_one_good_frame(
    toward_device: bool, garbage: bytes, sent: list[bytes]
) -> None:
    stream = garbage + b"".join(encode(body, toward_device) for body in sent)
    items = decoded(stream, toward_device)
    rest = [("", body) for body in sent[1:]]
    assert items[len(items) - len(rest) :] == rest
    if not garbage or garbage.endswith(framing.DELIMITER):
        assert items[-len(sent) :] == [("", body) for body in sent]


@both_ways
@at_length
@given(data=st.data(), sent=st.lists(bodies, min_size=3, max_size=3))
def test_damage_inside_one_frame_spares_the_others(
    toward_device: bool, data: st.DataObject, sent: list[bytes]
) -> None:
    before, hit, after = (encode(body, toward_device) for body in sent)
    start = data.draw(st.integers(0, len(hit) - 2))
    stop = data.draw(st.integers(start, len(hit) - 1))
    stream = before + hit[:start] + data.draw(loose) + hit[stop:] + after
    items = decoded(stream, toward_device)
    assert items[0] == ("", sent[0])
    assert items[-1] == ("", sent[2])


@both_ways
@pytest.mark.clause("F9")
def test_a_short_write_ended_by_a_delimiter_costs_only_itself(toward_device: bool) -> None:
    cut = encode(b"a block of knots", toward_device)
    for length in range(1, len(cut) - 1):
        stream = cut[:length] + framing.DELIMITER + encode(b"next", toward_device)
        (reason, raw), last = decoded(stream, toward_device)
        assert (reason != "", raw) == (True, cut[:length])
        assert last == ("", b"next")


@both_ways
def test_a_run_of_any_length_is_called_too_long_once(toward_device: bool) -> None:
    decoder = Decoder(16, toward_device)
    for _ in range(1000):
        assert decoder.feed(b"\x11" * 50) == []
    items = decoder.feed(b"\x00" + encode(b"ok", toward_device))
    assert told(items) == [(framing.BAD_LONG, b"\x11" * 16), ("", b"ok")]


@pytest.mark.parametrize("body_size", [0, 1, 2, 3])
def test_a_crc_without_a_body_is_no_frame(body_size: int) -> None:
    run = cobs.encode(bytes(range(5, 5 + body_size)))
    assert told([decode_run(run, False)]) == [(framing.BAD_SHORT, run)]
    alone = cobs.encode(struct.pack("<I", zlib.crc32(b"")))
    assert told([decode_run(alone, False)]) == [(framing.BAD_SHORT, alone)]


@pytest.mark.parametrize(
    "run", [b"\x02", b"\x02\x02B", b"\x02\x06", b"a\x02", b"\x01", b"\x02\x03", b"\x04", b"\x05"]
)
@pytest.mark.clause("F5")
def test_a_run_toward_the_device_has_one_spelling(run: bytes) -> None:
    # A host that forgets to escape must fail in every test, not first on an RP2040.
    assert told([decode_run(run, True)]) == [(framing.BAD_ESCAPE, run)]


# -- text outside frames -----------------------------------------------------------------


@pytest.mark.clause("R2")
def test_a_prompt_and_a_traceback_are_shown_as_what_they_are() -> None:
    said = b'Traceback (most recent call last):\r\n  File "main.py", line 7\r\nOSError: 28\r\n>>> '
    (item,) = Decoder(LIMIT, False).feed(said + framing.DELIMITER)
    assert isinstance(item, Bad)
    assert item.text() == said.decode()


@at_length
@given(st.one_of(st.binary(max_size=40), st.text(max_size=40).map(str.encode)))
def test_shown_text_holds_nothing_that_drives_a_terminal(raw: bytes) -> None:
    text = readable(raw)
    assert all(letter in "\t\n\r" or " " <= letter <= "~" for letter in text)
    assert (len(text) + raw.count(b"\x08")) * 10 >= len(raw) * 9 or text == ""


def test_frames_are_not_taken_for_text() -> None:
    assert readable(b"") == ""
    assert readable(encode(bytes(range(128, 160)), False)) == ""


def test_the_echo_of_a_prompt_is_text_though_its_cursor_goes_back() -> None:
    """As MicroPython 1.28 sends it back for a hello behind an escape, which is a Ctrl-B there."""
    echo = b"#HiKneqFQw\x08Cw\x08)w\x08kw\x08"
    assert readable(echo) == "#HiKneqFQwCw)wkw"
    assert readable(b"\x08" * 8 + b"\x01" * 2) == ""
