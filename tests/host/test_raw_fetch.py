"""If these fail, raw pairs come over wrong or not at all, though the device has them."""

from __future__ import annotations

from collections.abc import Callable
from zlib import crc32

import numpy as np
import pytest
from scripted import ScriptedPort, reply

from kneewire import framing
from kneewire.messages import RAW_A_BLOCK, RAW_BYTES, Message, pack
from kneewise.errors import LinkError, RefusedError
from kneewise.instrument.sweep import TRIES, fetch_raw
from kneewise.link.session import Session

SWEEP_ID = bytes(range(16))
WINDOW = 16
COUNT = 2048
CODES = np.random.default_rng(7).integers(0, 1 << 16, (COUNT, 2), dtype=np.uint16)
DATA = CODES.astype("<u2").tobytes()


def manifest(**changes: int) -> Message:
    values = {"sweep_id": SWEEP_ID, "raw_first": 575, "raw_pairs": COUNT, "raw_crc": crc32(DATA)}
    return Message("manifest", 77, 1, values | changes)


def block(asked: Message, first: int, data: bytes, sequence: int | None = None) -> bytes:
    sequence = asked.sequence if sequence is None else sequence
    body = pack("raw_block", asked.session, sequence, {"first": first, "data": data})
    return framing.encode(body, False)


class Tracer:
    """Answers as SPEC.md says; `change` makes something else of a block, by its number."""

    def __init__(self, change: Callable[[int, Message, bytes], bytes] | None = None) -> None:
        self.change = change or (lambda number, asked, coded: coded)
        self.blocks = 0

    def __call__(self, asked: Message) -> bytes:
        assert (asked.name, asked["sweep_id"]) == ("fetch_raw", SWEEP_ID)
        first, a_block = asked["first"], asked["a_block"] or RAW_A_BLOCK
        count = min(asked["count"], WINDOW * a_block)
        assert count == asked["count"], "more than the window was asked for"
        assert first + count <= COUNT
        out = b""
        for place in range(first, first + count, a_block):
            many = min(a_block, first + count - place)
            data = DATA[RAW_BYTES * place : RAW_BYTES * (place + many)]
            out += self.change(self.blocks, asked, block(asked, place, data))
            self.blocks += 1
        return out + reply(asked, {"first": first, "count": count})


def fetched(answer: Callable[[Message], bytes]) -> tuple[ScriptedPort, np.ndarray]:
    """What was asked for on the way, and the pairs, which are those of the tracer."""
    port = ScriptedPort(answer)
    session = Session(port)
    session.hello()
    pairs = fetch_raw(session, manifest())
    assert pairs.first == 575
    assert pairs.voltage.dtype == pairs.current.dtype == np.uint16
    assert pairs.voltage.shape == pairs.current.shape == (COUNT,)
    return port, np.stack([pairs.voltage, pairs.current], axis=1)


def asked_for(port: ScriptedPort) -> list[tuple[int, int, int]]:
    return [
        (message["first"], message["count"], message["a_block"])
        for message in port.asked
        if message.name == "fetch_raw"
    ]


@pytest.mark.clause("K7", "C2")
def test_all_pairs_come_in_as_few_bursts_as_the_window_allows() -> None:
    port, found = fetched(Tracer())
    assert (found == CODES).all()
    most = WINDOW * RAW_A_BLOCK
    due = [(start, min(most, COUNT - start)) for start in range(0, COUNT, most)]
    assert asked_for(port) == [(first, count, RAW_A_BLOCK) for first, count in due]


@pytest.mark.clause("K7", "W11")
def test_a_lost_block_is_asked_for_by_its_place_after_the_burst() -> None:
    port, found = fetched(Tracer(lambda number, asked, coded: b"" if number in (2, 3) else coded))
    assert (found == CODES).all()
    assert asked_for(port)[3:] == [(2 * RAW_A_BLOCK, 2 * RAW_A_BLOCK, RAW_A_BLOCK)]


@pytest.mark.clause("K7", "W11")
def test_where_most_is_lost_blocks_get_smaller() -> None:
    """A line that spoils long frames would let none through for ever."""

    def short_ones_pass(number: int, asked: Message, coded: bytes) -> bytes:
        return coded if len(coded) < 60 else b""

    port, found = fetched(Tracer(short_ones_pass))
    assert (found == CODES).all()
    sizes = [a_block for _, _, a_block in asked_for(port)]
    assert sorted(set(sizes), reverse=True) == [RAW_A_BLOCK, RAW_A_BLOCK // 3, RAW_A_BLOCK // 9]


def test_on_a_bad_link_gaps_near_each_other_are_asked_for_as_one() -> None:
    """It is the asking that is lost there; one for each gap would take minutes."""

    def most_are_lost(number: int, asked: Message, coded: bytes) -> bytes:
        return coded if number % 3 == 0 else b""

    port, found = fetched(Tracer(most_are_lost))
    assert (found == CODES).all()
    fetches = asked_for(port)
    # Of 35 blocks 23 were lost, in 12 gaps.
    assert [first for first, _, a_block in fetches if a_block == RAW_A_BLOCK // 3] == [
        RAW_A_BLOCK + 6 * RAW_A_BLOCK * number for number in range(6)
    ]
    assert all(count <= WINDOW * a_block for _, count, a_block in fetches)


@pytest.mark.clause("K8")
@pytest.mark.parametrize("wrong", [0, 30])
def test_pairs_that_do_not_agree_with_the_crc_are_fetched_anew(wrong: int) -> None:
    def spoiled(number: int, asked: Message, coded: bytes) -> bytes:
        return block(asked, asked["first"], bytes(RAW_BYTES)) if number == wrong else coded

    _, found = fetched(Tracer(spoiled))
    assert (found == CODES).all()


@pytest.mark.clause("K8", "B6")
@pytest.mark.parametrize(
    "stray",
    [
        lambda asked: block(asked, COUNT, DATA[:RAW_BYTES]),
        lambda asked: block(asked, COUNT - 1, bytes(2 * RAW_BYTES)),
        lambda asked: block(asked, 0xFFFF, DATA[: 9 * RAW_BYTES]),
        lambda asked: block(asked, 4, bytes(RAW_BYTES + 1)),
        lambda asked: block(asked, 4, b""),
        lambda asked: block(asked, asked["first"], bytes(40), sequence=asked.sequence + 9),
    ],
    ids=[
        "behind the last",
        "over the last",
        "far behind",
        "a part of a pair",
        "empty",
        "another's",
    ],
)
def test_a_block_that_cannot_belong_to_the_sweep_changes_nothing(
    stray: Callable[[Message], bytes],
) -> None:
    port, found = fetched(Tracer(lambda number, asked, coded: coded + stray(asked)))
    assert (found == CODES).all()
    assert len(asked_for(port)) == 3


def test_without_raw_pairs_nothing_is_asked_for() -> None:
    port = ScriptedPort(Tracer())
    session = Session(port)
    session.hello()
    pairs = fetch_raw(session, manifest(raw_first=0, raw_pairs=0, raw_crc=0))
    assert (len(pairs), pairs.first) == (0, 0)
    assert pairs.voltage.dtype == pairs.current.dtype == np.uint16
    assert asked_for(port) == []


def test_a_refusal_is_told() -> None:
    def refuses(asked: Message) -> bytes:
        values = {"of_kind": 0x33, "code": 9, "guard": 0, "measured": 0, "limit": 0, "unit": 0}
        return framing.encode(pack("refusal", asked.session, asked.sequence, values), False)

    with pytest.raises(RefusedError) as caught:
        fetched(refuses)
    assert caught.value.what == "fetch_raw was refused"
    assert caught.value.found == "no held sweep"


@pytest.mark.clause("K8")
@pytest.mark.parametrize(
    ("answer", "missing"),
    [(lambda asked: b"", COUNT), (Tracer(), COUNT)],
    ids=["silence", "never the right CRC"],
)
def test_pairs_that_never_come_or_never_agree_end_in_words(
    answer: Callable[[Message], bytes], missing: int
) -> None:
    session = Session(ScriptedPort(answer))
    session.hello()
    with pytest.raises(LinkError) as caught:
        fetch_raw(session, manifest(raw_crc=5))
    error = caught.value
    assert error.what == "fetching sweep 00010203"
    assert error.found.startswith(
        f"{missing} of {COUNT} pairs missing, and nothing in the last {TRIES} bursts ("
    )
    assert error.expected == "all pairs, with the CRC of the manifest"
    assert error.next_step.startswith("use a shorter or better cable, then sweep again")
