"""If these fail, a host asks too often, too much, or takes another's answer for its own."""

from __future__ import annotations

import pytest
from scripted import HELLO, ScriptedPort, notice, reply

from kneewire import catalogue, framing
from kneewire.messages import KNOT_BYTES, Message, pack
from kneewise.errors import LinkError
from kneewise.instrument.sweep import fetch
from kneewise.link.session import AGAIN_S, BEAT_S, Session

BEAT = {"received_us": 1, "replied_us": 2}
SWEEP_ID = bytes(range(16))


def open_session(port: ScriptedPort) -> Session:
    made = Session(port)
    made.hello()
    return made


@pytest.mark.clause("B6")
def test_answers_to_nobodys_question_and_unknown_kinds_are_passed_over() -> None:
    stray = framing.encode(bytes([0xE9]) + bytes(8) + b"what is this", False)

    def answer(message: Message) -> bytes:
        other = Message(message.name, message.session, message.sequence + 7, {})
        return stray + reply(other, {"received_us": 9, "replied_us": 9}) + reply(message, BEAT)

    session = open_session(ScriptedPort(answer))
    assert session.request("heartbeat").values == BEAT
    assert session.frames.counters.late == 1


@pytest.mark.clause("S6")
def test_a_request_is_repeated_byte_for_byte_until_its_one_deadline() -> None:
    port = ScriptedPort()
    session = open_session(port)
    begun = port.clock()
    with pytest.raises(LinkError):
        session.request("heartbeat", deadline_s=2.0)
    assert port.clock() - begun == pytest.approx(2.0, abs=0.01)
    asked = [message for message in port.asked if message.name == "heartbeat"]
    assert len(asked) == pytest.approx(2.0 / AGAIN_S, abs=2)
    assert len({(message.session, message.sequence) for message in asked}) == 1
    assert session.frames.counters.sent_again == len(asked) - 1


@pytest.mark.clause("S6")
def test_replies_that_trickle_in_do_not_stretch_the_deadline() -> None:
    def answer(message: Message) -> bytes:
        return reply(Message(message.name, message.session, message.sequence + 1, {}), BEAT)

    port = ScriptedPort(answer)
    session = open_session(port)
    begun = port.clock()
    with pytest.raises(LinkError):
        session.request("heartbeat", deadline_s=1.0)
    assert port.clock() - begun < 1.2


@pytest.mark.clause("R1")
def test_every_frame_follows_the_guard() -> None:
    port = ScriptedPort(
        lambda message: reply(message, BEAT) if message.name == "heartbeat" else b""
    )
    session = open_session(port)
    session.request("heartbeat")
    session.beat()
    session.abort()
    assert all(data.startswith(framing.GUARD) for data in port.written)


@pytest.mark.clause("F7")
def test_the_guard_alone_is_no_frame_and_no_bad_one() -> None:
    decoder = framing.Decoder(64, toward_device=True)
    assert decoder.feed(framing.GUARD * 3 + framing.DELIMITER) == []
    assert (decoder.good, decoder.bad) == (0, 0)


@pytest.mark.clause("C1")
@pytest.mark.parametrize("room", [64, 256])
def test_no_frame_is_longer_than_the_device_takes(room: int) -> None:
    port = ScriptedPort()
    session = Session(port)
    if room != 64:
        port.hello = {**HELLO, "max_frame": room}
        session.hello()
    fits = pack("heartbeat", 1, 1) + bytes(room - 9 - 4)
    session._send(fits)
    with pytest.raises(ValueError, match=f"the device takes {room}"):
        session._send(fits + b"x")


@pytest.mark.clause("C2", "W11", "W12")
@pytest.mark.parametrize("window", [1, 3, 16])
def test_no_burst_is_longer_than_the_window(window: int) -> None:
    records = bytes(n % 251 for n in range(96 * KNOT_BYTES))

    def answer(message: Message) -> bytes:
        first, count = message["first"], message["count"]
        assert count <= window * message["a_block"]
        out = b""
        for place in range(first, first + count, message["a_block"]):
            many = min(message["a_block"], first + count - place)
            data = records[place * KNOT_BYTES : (place + many) * KNOT_BYTES]
            body = pack("block", message.session, message.sequence, {"first": place, "data": data})
            out += framing.encode(body, False)
        return out + reply(message, {"first": first, "count": count})

    port = ScriptedPort(answer)
    port.hello = {**HELLO, "window": window}
    session = open_session(port)
    crc = framing.crc32(records)
    manifest = Message("manifest", 1, 1, {"sweep_id": SWEEP_ID, "knots": 96, "knots_crc": crc})
    found = fetch(session, manifest)
    assert found.crc_ok()
    assert found.resent == 0


@pytest.mark.clause("W5", "W7")
def test_in_the_quiet_nothing_is_sent_but_heartbeats_twice_a_second() -> None:
    port = ScriptedPort()
    session = open_session(port)
    port.asked.clear()
    assert session.wait_quiet(5.0) is None
    assert {message.name for message in port.asked} == {"heartbeat"}
    assert len(port.asked) == pytest.approx(5.0 / BEAT_S, abs=2)


def test_a_heartbeat_that_is_answered_ends_the_quiet() -> None:
    """The notice was lost; a device that is charging answers nothing."""
    port = ScriptedPort(lambda message: reply(message, BEAT))
    session = open_session(port)
    assert session.wait_quiet(60.0) is None
    assert port.clock() < 2.0


@pytest.mark.clause("W8")
def test_a_notice_is_found_whatever_comes_before_it() -> None:
    port = ScriptedPort()
    session = open_session(port)
    port.out = b"\x05garbage\x00" + notice("bleed_ended", {"sweep_id": SWEEP_ID, "state": 0})
    port.out += notice("charge_ended", {"sweep_id": SWEEP_ID, "end_reason": 1})
    found = session.wait_notice("charge_ended", 1.0)
    assert found is not None
    assert catalogue.END_REASONS[found["end_reason"]] == "complete"
    assert session.frames.counters.bad == 1


@pytest.mark.clause("R2")
def test_text_between_frames_is_kept_and_shown() -> None:
    port = ScriptedPort(lambda message: b"a line of text\r\n\x00" + reply(message, BEAT))
    session = open_session(port)
    session.request("heartbeat")
    assert session.text == "a line of text\r\n"
    assert session.frames.counters.texts == 1
