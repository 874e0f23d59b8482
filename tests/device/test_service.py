"""If these fail, a request goes unanswered, acts twice, or acts for somebody else."""

from __future__ import annotations

import pytest
from fake_board import DEVICE_ID, FakeBoard, record
from hosting import SWEEP_ID, Device, refusal, service_module
from hypothesis import given, settings
from hypothesis import strategies as st

from kneewire import catalogue, framing
from kneewire.messages import NO_SESSION, fingerprint, pack
from kneewire.seam import crc32

UNKNOWN_KIND, MALFORMED, UNKNOWN_SESSION, STALE, WRONG_STATE = 1, 2, 3, 4, 5
BAD_TOKEN, INTERLOCK, NO_SWEEP, HELD, OUT_OF_RANGE = 7, 8, 9, 10, 11

VALUES = {
    "arm": {
        "knots": 32,
        "closed_limit_ms": 1000,
        "confirmed": 1,
        "raw_from_us": 0,
        "raw_pairs": 0,
        "limit_mv": 0xFFFFFFFF,
        "limit_ma": 0xFFFFFFFF,
        "exercise": 0,
    },
    "fire": {"token": 1, "sweep_id": SWEEP_ID},
    "fetch": {"sweep_id": SWEEP_ID, "first": 0, "count": 1, "a_block": 0},
    "fetch_raw": {"sweep_id": SWEEP_ID, "first": 0, "count": 1, "a_block": 0},
    "acknowledge": {"sweep_id": SWEEP_ID},
    "note_proof": {"day": 22_000, "digest": SWEEP_ID},
    "hello": {"major": 0, "minor": 1, "fingerprint": 5, "host_nonce": 0x1234},
}
REQUESTS = [row[0] for row in catalogue.MESSAGES.values() if row[1] == catalogue.TO_DEVICE]
CHANGING = ["arm", "fire", "clear_fault", "acknowledge", "note_proof"]


@pytest.fixture
def device(board, tmp_path):
    return Device(board, tmp_path)


@pytest.mark.parametrize("name", REQUESTS)
@pytest.mark.clause("B3", "B4")
def test_every_request_is_answered_in_its_own_name(device, name):
    frame = device.frame(name, VALUES.get(name), sequence=31)
    try:
        answers = device.say(frame)
    except service_module.Leave:
        answers = device.heard()
    (answer,) = answers
    kind = catalogue.KINDS[name]
    assert (answer.session, answer.sequence) == (device.session, 31)
    if answer.name == "refusal":
        assert answer["of_kind"] == kind
    else:
        assert catalogue.KINDS[answer.name] == kind | catalogue.REPLY


def test_every_request_has_a_handler():
    assert set(service_module.HANDLERS) | {"abort"} == set(REQUESTS)


@pytest.mark.parametrize("kind", [k for k in range(256) if k not in catalogue.MESSAGES])
@pytest.mark.clause("B5")
def test_a_kind_that_this_firmware_does_not_know_is_refused(device, kind):
    body = bytes([kind]) + pack("status", device.session, 5)[1:] + b"future fields"
    (answer,) = device.say(framing.encode(body, toward_device=True))
    assert (refusal(answer), answer["of_kind"], answer.sequence) == (UNKNOWN_KIND, kind, 5)
    assert device.ask("status").name == "status_reply"


@pytest.mark.parametrize("name", ["block", "hello_reply", "refusal", "charge_ended"])
def test_what_only_a_device_says_is_refused(device, name):
    rows = catalogue.MESSAGES[catalogue.KINDS[name]][4]
    blank = {"b8": bytes(8), "b16": bytes(16), "knots": b""}
    values = {row[0]: blank.get(row[1], 0) for row in rows}
    assert refusal(device.ask(name, values)) == UNKNOWN_KIND


@pytest.mark.parametrize("name", sorted(VALUES))
def test_a_request_cut_short_is_malformed(device, name):
    body = pack(name, device.session, 9, VALUES[name])
    for end in range(9, len(body)):
        (answer,) = device.say(framing.encode(body[:end], toward_device=True))
        assert refusal(answer) == MALFORMED
    assert device.state() == "safe"


def test_even_half_a_header_is_answered(device):
    for end in range(1, 9):
        body = pack("status", device.session, 9)[:end]
        (answer,) = device.say(framing.encode(body, toward_device=True))
        assert (refusal(answer), answer["of_kind"]) == (MALFORMED, 0x10)


@pytest.mark.clause("B2")
def test_extra_bytes_at_the_end_are_ignored(device):
    body = pack("arm", device.session, 9, VALUES["arm"]) + b"a later version's field"
    (answer,) = device.say(framing.encode(body, toward_device=True))
    assert answer.name == "arm_reply"


@pytest.mark.parametrize("name", [n for n in REQUESTS if n not in ("hello", "prompt", "abort")])
@pytest.mark.parametrize("session", ["another", "none"])
@pytest.mark.clause("S5")
def test_a_stranger_is_refused(device, name, session):
    number = NO_SESSION if session == "none" else device.session ^ 1
    assert refusal(device.ask(name, VALUES.get(name), session=number)) == UNKNOWN_SESSION
    assert device.state() == "safe"


@pytest.mark.clause("S5")
def test_before_any_hello_nothing_but_hello_is_answered_with_more_than_a_refusal(board, tmp_path):
    device = Device(board, tmp_path)
    device.service.session = NO_SESSION
    assert refusal(device.ask("status", session=NO_SESSION)) == UNKNOWN_SESSION


# -- requests that change state ------------------------------------------------------------


def test_arming_twice_with_the_same_sequence_gives_the_same_token(device):
    one = device.arm(sequence=4)
    again = device.arm(sequence=4)
    assert one["token"] == again["token"] == device.sequencer.token
    assert device.arm(sequence=5)["token"] != one["token"]


@pytest.mark.clause("S2", "W4")
def test_a_repeated_fire_closes_once(device):
    token = device.arm()["token"]
    fired = device.fire(token, sequence=9)
    assert fired.name == "fire_reply"
    device.turns()
    device.heard()
    again = device.fire(token, sequence=9)
    assert (again.name, again.values) == (fired.name, fired.values)
    device.turns()
    assert device.board.closings == 1


def test_a_refusal_is_repeated_as_well(device):
    refused = device.fire(5, sequence=3)
    device.arm(sequence=4)
    again = device.fire(5, sequence=3)
    assert (refusal(again), again["of_kind"]) == (refusal(refused), refused["of_kind"])
    assert device.state() == "armed"


@pytest.mark.clause("S2", "S3")
def test_the_last_eight_replies_are_kept_and_older_ones_are_stale(device):
    tokens = {sequence: device.arm(sequence=sequence)["token"] for sequence in range(1, 13)}
    for sequence in range(5, 13):
        assert device.arm(sequence=sequence)["token"] == tokens[sequence]
    for sequence in range(1, 5):
        assert refusal(device.arm(sequence=sequence)) == STALE
    assert len(device.service.stored) == service_module.STORED_REPLIES == 8
    assert device.sequencer.token == tokens[12]


@pytest.mark.parametrize("name", CHANGING)
@pytest.mark.clause("S1", "S3")
def test_a_sequence_below_the_last_is_stale_and_does_nothing(device, name):
    token = device.arm(sequence=100)["token"]
    assert refusal(device.ask(name, VALUES.get(name), sequence=99)) == STALE
    assert refusal(device.ask(name, VALUES.get(name), sequence=0)) == STALE
    assert (device.state(), device.sequencer.token) == ("armed", token)


@pytest.mark.clause("S4")
def test_reading_needs_no_order(device):
    device.arm(sequence=100)
    for sequence in (100, 7, 7, 0):
        assert device.ask("status", sequence=sequence).name == "status_reply"


# -- hello ---------------------------------------------------------------------------------


@pytest.mark.clause("H4")
def test_hello_says_what_a_host_must_know(device):
    answer = device.hello()
    assert answer["device_id"] == DEVICE_ID
    assert answer["fingerprint"] == fingerprint()
    assert answer["profile_crc"] == crc32(record())
    assert answer["boot_nonce"] == device.service.boot_nonce
    assert (answer["reset_cause"], answer["max_knots"], answer["ticks_per_s"]) == (1, 512, 10**6)
    assert answer["flags"] == 0


@pytest.mark.clause("H2", "H4")
def test_hello_with_the_same_nonce_resumes_the_session(device):
    token = device.arm(sequence=4)["token"]
    session = device.session
    assert device.hello()["session"] == session
    assert (device.state(), device.sequencer.token) == ("armed", token)
    assert device.arm(sequence=4)["token"] == token


@pytest.mark.clause("H2")
def test_hello_with_another_nonce_is_another_session(device):
    session = device.session
    device.arm(sequence=50)
    assert device.hello(nonce=999)["session"] != session
    assert (device.state(), device.sequencer.token) == ("safe", 0)
    # The operator of another connection has confirmed nothing.
    assert refusal(device.arm(confirmed=0, sequence=1)) == INTERLOCK
    assert device.arm(sequence=2).name == "arm_reply"
    assert refusal(device.ask("status", session=session)) == UNKNOWN_SESSION


def test_hello_is_answered_whatever_version_the_host_has(device):
    values = {"major": 250, "minor": 9, "fingerprint": 1, "host_nonce": 4}
    assert device.ask("hello", values, session=NO_SESSION).name == "hello_reply"


def test_without_a_profile_hello_says_so_and_arming_says_why(board, tmp_path):
    device = Device(board, tmp_path, bare=True)
    assert device.hello()["profile_crc"] == 0
    assert device.ask("read_profile")["record"] == b""
    answer = device.arm()
    assert (refusal(answer), answer["guard"]) == (INTERLOCK, 14)
    assert device.ask("status")["state"] == 0
    device.turns(ms=500)


# -- bytes ---------------------------------------------------------------------------------


@pytest.mark.clause("F9")
def test_a_short_write_costs_one_frame_and_no_more(device):
    board = device.board
    board.write_room = 11
    board.incoming += device.frame("status")
    device.service.poll()
    board.write_room = None
    board.incoming += device.frame("heartbeat", sequence=88)
    device.service.poll()
    items = device.decoder.feed(bytes(board.sent))
    assert [isinstance(item, framing.Bad) for item in items] == [True, False]
    board.sent.clear()
    assert device.ask("status").name == "status_reply"


def test_a_host_that_reads_nothing_for_long_is_answered_once_it_does(device):
    board = device.board
    board.write_room = 5
    for _ in range(6):
        board.incoming += device.frame("status")
        device.service.poll()
    board.write_room = None
    board.incoming += device.frame("heartbeat", sequence=99)
    device.service.poll()
    last = device.decoder.feed(bytes(board.sent))[-1]
    assert not isinstance(last, framing.Bad)
    assert last[0] == catalogue.KINDS["heartbeat_reply"]


@settings(max_examples=100)
@given(st.data())
@pytest.mark.clause("F6")
def test_garbage_between_requests_costs_at_most_the_next_one(tmp_path_factory, data):
    device = Device(FakeBoard(), tmp_path_factory.mktemp("device"))
    garbage = data.draw(st.binary(max_size=700))
    frames = device.frame("heartbeat", sequence=1) + device.frame("heartbeat", sequence=2)
    device.board.incoming += garbage + frames
    while device.board.incoming:
        try:
            device.service.poll()
        except service_module.Leave:
            return
    assert device.heard()[-1].sequence == 2


@pytest.mark.clause("C3")
def test_status_counts_good_and_bad_frames(device):
    before = device.ask("status")
    device.say(b"no frame at all\0" * 3)
    after = device.ask("status")
    assert after["frames_bad"] - before["frames_bad"] == 3
    assert after["frames_good"] - before["frames_good"] == 1


@pytest.mark.clause("T1", "T2")
def test_a_heartbeat_has_the_times_that_clocks_are_set_by(device):
    answer = device.ask("heartbeat")
    assert answer["received_us"] <= answer["replied_us"] == device.board.time_us


@pytest.mark.clause("R5")
def test_the_prompt_is_given_after_an_answer(device):
    device.board.incoming += device.frame("prompt")
    with pytest.raises(service_module.Leave):
        device.service.poll()
    (answer,) = device.heard()
    assert answer["leaving"] == 1


@pytest.mark.clause("R5")
def test_the_prompt_is_refused_while_the_bleed_must_stay_off(device):
    device.sequencer.fault((2, 39000, 200, 1))
    assert device.ask("prompt")["leaving"] == 0


@pytest.mark.clause("F9")
def test_a_write_that_ctrl_c_cut_short_costs_one_frame_and_no_more(device):
    plain = device.board.link_write

    def interrupted(data):
        plain(data[:7])
        device.board.link_write = plain
        raise KeyboardInterrupt

    device.board.link_write = interrupted
    with pytest.raises(KeyboardInterrupt):
        device.say(device.frame("status"))
    device.board.incoming += device.frame("heartbeat")
    device.service.poll()
    items = device.decoder.feed(bytes(device.board.sent))
    assert [isinstance(item, framing.Bad) for item in items] == [True, False]
