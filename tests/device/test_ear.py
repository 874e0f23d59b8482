"""If these fail, an abort is not heard while the contact is closed, or one is heard in noise."""

from __future__ import annotations

from itertools import pairwise

import pytest
from charging import ABORT, BEAT
from fake_board import FakeBoard
from hypothesis import given, settings
from hypothesis import strategies as st

from kneewire import framing
from kneewire.messages import pack
from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.ear")
ANY = st.binary(max_size=200)
# Another session's abort, and every other request of this one, look alike for many bytes.
OTHERS = [
    framing.encode(pack("abort", 8, 0), toward_device=True),
    framing.encode(pack("abort", 7, 1), toward_device=True),
    framing.encode(pack("status", 7, 3), toward_device=True),
    BEAT,
]


class Trickle(FakeBoard):
    """Hands out at most so many bytes at a call, then none, as they arrive at a real port."""

    def __init__(self, pieces: list[bytes]) -> None:
        super().__init__()
        self.pieces = pieces

    def link_read(self, buffer: bytearray) -> int:
        if not self.incoming and self.pieces:
            self.incoming += self.pieces.pop(0)
            return 0
        return super().link_read(buffer)


def cut(data: bytes, places: list[int]) -> list[bytes]:
    ends = [0, *sorted(min(place, len(data)) for place in places), len(data)]
    return [data[a:b] for a, b in pairwise(ends)]


def hear(data: bytes, places: list[int], *, before: bytes = b""):
    board = Trickle(cut(data, places))
    ear = module.Ear(board)
    ear.expect(ABORT, before)
    while board.pieces or board.incoming:
        ear.listen()
    return ear


def said(data: bytes) -> bool:
    """An account of its own: whole runs between delimiters."""
    return ABORT[:-1] in data.split(b"\0")[:-1]


CUTS = st.lists(st.integers(0, 600), max_size=12)


@settings(max_examples=500)
@given(ANY, ANY, CUTS)
@pytest.mark.clause("A2")
def test_abort_is_heard_behind_any_delimiter_in_any_pieces(before, after, places):
    assert hear(before + b"\0" + ABORT + after, places).aborted


@settings(max_examples=500)
@given(st.lists(st.sampled_from([*OTHERS, ABORT, ABORT[:-1], ABORT[1:], b"\0", b"x"])), CUTS)
def test_abort_is_heard_where_it_stands_between_delimiters_and_nowhere_else(parts, places):
    data = b"".join(parts)
    assert hear(data, places).aborted is said(data)


@settings(max_examples=300)
@given(ANY, CUTS, st.integers(0, 200))
def test_what_came_behind_the_fire_counts_as_heard(data, places, at):
    whole = data + b"\0" + ABORT
    ear = hear(whole[at:], places, before=whole[:at])
    assert ear.aborted
    assert ear.kept() == whole[:512]


@pytest.mark.parametrize("place", range(len(ABORT)))
def test_one_wrong_byte_is_no_abort(place):
    for wrong in range(256):
        if wrong != ABORT[place]:
            data = ABORT[:place] + bytes([wrong]) + ABORT[place + 1 :]
            assert not hear(b"\0" + data + b"\0", []).aborted


@pytest.mark.parametrize("other", OTHERS)
@pytest.mark.clause("A2")
def test_other_requests_are_no_abort(other):
    assert not hear(other * 3, [3, 9]).aborted


def test_one_byte_more_or_less_is_no_abort():
    for data in (b"a" + ABORT, ABORT[:-1] + b"a\0", ABORT[:-2] + b"\0", ABORT[:-1]):
        assert not hear(data, []).aborted


def test_nothing_is_an_abort_until_one_is_expected():
    ear = module.Ear(Trickle([b"\0\0" + ABORT]))
    ear.listen()
    ear.listen()
    assert not ear.aborted


@settings(max_examples=200)
@given(st.binary(max_size=900), CUTS)
@pytest.mark.clause("W6")
def test_what_was_heard_is_kept_for_afterwards_as_far_as_there_is_room(data, places):
    ear = hear(data, places)
    assert ear.kept() == data[: module.KEEP]
    assert ear.dropped == max(len(data) - module.KEEP, 0)


def test_an_abort_is_heard_beyond_the_room():
    assert hear(b"x" * 700 + b"\0" + ABORT, [650]).aborted


def test_the_next_charge_starts_with_a_clean_ear():
    ear = hear(ABORT + b"xyz", [])
    ear.expect(ABORT)
    assert not ear.aborted
    assert ear.kept() == b""
    ear.expect(ABORT, ABORT[:4])
    assert ear.kept() == ABORT[:4]


@pytest.mark.clause("W7")
def test_silence_and_voice_are_told_apart():
    board = FakeBoard()
    ear = module.Ear(board)
    ear.expect(ABORT)
    assert ear.listen() is False
    board.incoming += b"\0"
    assert ear.listen() is True
    assert ear.listen() is False


def test_a_flood_of_bytes_is_heard_a_piece_at_a_time():
    """Heard whole, 512 bytes would hold up the pulse for so long that the contact opens."""
    board = Trickle([bytes(600)])
    ear = module.Ear(board)
    ear.expect(ABORT)
    calls = 0
    while board.pieces or board.incoming:
        before = len(ear.kept())
        ear.listen()
        calls += 1
        assert len(ear.kept()) - before <= module.PIECE
    assert calls >= 512 // module.PIECE


def test_before_the_closing_all_that_came_is_heard():
    board = FakeBoard()
    board.incoming += b"x" * 400 + b"\0" + ABORT
    ear = module.Ear(board)
    ear.expect(ABORT)
    ear.listen_out()
    assert ear.aborted
