"""If these fail, a sweep starts without a token, is lost before the host has it, or runs twice."""

from __future__ import annotations

import pytest
from hosting import STATES, SWEEP_ID, Device, refusal
from test_service import (
    BAD_TOKEN,
    HELD,
    INTERLOCK,
    NO_SWEEP,
    OUT_OF_RANGE,
    WRONG_STATE,
)

from kneewire.messages import KNOTS_A_BLOCK, unpack_knots
from kneewire.seam import crc32

OTHER_ID = b"another sweep id"


@pytest.fixture
def device(board, tmp_path):
    return Device(board, tmp_path)


def put(device, state: str) -> None:
    """Bring the sequencer to a state, by force."""
    device.sequencer.state = next(n for n, name in STATES.items() if name == state)


# -- arming --------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("changes", "fine"),
    [
        ({"knots": 15}, False),
        ({"knots": 16}, True),
        ({"knots": 512}, True),
        ({"knots": 513}, False),
        ({"closed_limit_ms": 0}, False),
        ({"closed_limit_ms": 1}, True),
        ({"closed_limit_ms": 120_000}, True),
        ({"closed_limit_ms": 120_001}, False),
    ],
)
@pytest.mark.clause("W1", "B7")
def test_arming_asks_for_no_more_than_there_is(device, changes, fine):
    answer = device.arm(**changes)
    assert answer.name == "arm_reply" if fine else refusal(answer) == OUT_OF_RANGE
    assert device.state() == ("armed" if fine else "safe")


@pytest.mark.parametrize("state", ["charging", "bleeding", "fault"])
def test_arming_is_refused_in_other_states(device, state):
    put(device, state)
    assert refusal(device.arm()) == WRONG_STATE


@pytest.mark.clause("W1")
def test_a_guard_says_what_it_found(device):
    device.board.capacitor_v = 5.0
    answer = device.arm()
    assert refusal(answer) == INTERLOCK
    assert (answer["guard"], answer["measured"], answer["limit"], answer["unit"]) == (
        1,
        4999,
        199,
        1,
    )


def test_a_source_that_was_confirmed_once_stays_so_for_the_session(device):
    assert refusal(device.arm(confirmed=0)) == INTERLOCK
    assert device.arm(confirmed=1).name == "arm_reply"
    assert device.arm(confirmed=0).name == "arm_reply"


@pytest.mark.clause("W2")
def test_a_second_arming_that_is_refused_spends_the_first_token(device):
    token = device.arm()["token"]
    device.board.loop_closed = False
    assert refusal(device.arm()) == INTERLOCK
    device.board.loop_closed = True
    assert refusal(device.fire(token)) == WRONG_STATE


def test_what_was_read_at_arming_is_told(device):
    answer = device.arm()
    assert answer["voltage_sum"] == answer["conversions"] * (24 + round(40 / 0.0165))
    assert answer["capacitor_sum"] == answer["conversions"] * 24
    assert answer["life_ms"] == 2000


# -- firing --------------------------------------------------------------------------------


def test_fire_without_a_token_is_refused(device):
    assert refusal(device.fire(0)) == WRONG_STATE
    assert refusal(device.fire(12345)) == WRONG_STATE
    assert device.service.fired is None


@pytest.mark.clause("W3")
def test_a_token_is_good_for_one_fire_even_a_wrong_one(device):
    token = device.arm()["token"]
    assert refusal(device.fire(token ^ 1)) == BAD_TOKEN
    assert device.state() == "safe"
    assert refusal(device.fire(token)) == WRONG_STATE
    device.turns(ms=100)
    assert device.board.closings == 0


@pytest.mark.clause("W2")
def test_zero_is_never_a_token(device):
    device.arm()
    assert refusal(device.fire(0)) == BAD_TOKEN


def test_a_fire_needs_the_hosts_sweep_id(device):
    assert refusal(device.fire(device.arm()["token"], bytes(16))) == BAD_TOKEN


@pytest.mark.clause("W2", "W3")
def test_a_token_expires(device):
    token = device.arm()["token"]
    device.board.pass_us(2_000_000)
    assert refusal(device.fire(token)) == WRONG_STATE
    assert (device.state(), device.board.closings) == ("safe", 0)


def test_a_token_lives_until_then(device):
    token = device.arm()["token"]
    device.board.pass_us(1_990_000)
    assert device.fire(token).name == "fire_reply"


def test_the_guards_look_again_at_the_fire(device):
    token = device.arm()["token"]
    device.board.reversed = True
    answer = device.fire(token)
    assert (refusal(answer), answer["guard"]) == (INTERLOCK, 5)
    device.board.reversed = False
    assert refusal(device.fire(token)) == WRONG_STATE


@pytest.mark.clause("W5")
def test_the_quiet_that_is_announced_covers_the_charge(board, tmp_path):
    device = Device(board, tmp_path, closed_limit_ms=700)
    assert device.fire(device.arm(closed_limit_ms=5000)["token"])["quiet_ms"] >= 700
    device = Device(board, tmp_path)
    assert device.fire(device.arm(closed_limit_ms=5000)["token"])["quiet_ms"] >= 5000


# -- the held sweep ------------------------------------------------------------------------


@pytest.mark.clause("W8", "W10", "W11")
def test_a_sweep_is_told_held_and_fetched_whole(device):
    fired, ended = device.sweep()
    assert (fired.name, ended.name, ended["sweep_id"]) == ("fire_reply", "charge_ended", SWEEP_ID)
    assert ended["end_reason"] == 1
    status = device.ask("status")
    assert (status["held"], status["sweep_id"]) == (1, SWEEP_ID)
    manifest = device.ask("read_manifest")
    assert (manifest["sweep_id"], manifest["knots"]) == (SWEEP_ID, 32)
    answers = device.say(
        device.frame("fetch", {"sweep_id": SWEEP_ID, "first": 0, "count": 32, "a_block": 0})
    )
    assert [answer.name for answer in answers[-1:]] == ["fetch_reply"]
    assert answers[-1]["count"] == 32
    data = b"".join(answer["data"] for answer in answers[:-1])
    assert crc32(data) == manifest["knots_crc"]
    knots = unpack_knots(data)
    assert sum(knot["pairs"] for knot in knots) == manifest["pairs"]
    assert knots[0]["time_us"] >= manifest["conducting_us"]
    assert knots[-1]["time_us"] < manifest["opened_us"]


@pytest.mark.clause("W11")
def test_a_gap_is_fetched_as_it_was_asked_for(device):
    device.sweep()
    asked = {"sweep_id": SWEEP_ID, "first": 7, "count": 11, "a_block": 0}
    *blocks, end = device.say(device.frame("fetch", asked))
    assert [block["first"] for block in blocks] == list(range(7, 18, KNOTS_A_BLOCK))
    assert (end["first"], end["count"]) == (7, 11)
    assert sum(len(block["data"]) for block in blocks) == 11 * 40


@pytest.mark.parametrize(("first", "count"), [(32, 1), (0, 0), (0, 33), (31, 2), (65535, 65535)])
def test_knots_that_are_not_there_are_out_of_range(device, first, count):
    device.sweep()
    asked = {"sweep_id": SWEEP_ID, "first": first, "count": count, "a_block": 0}
    assert refusal(device.ask("fetch", asked)) == OUT_OF_RANGE


@pytest.mark.clause("W11", "C2")
def test_a_burst_is_no_longer_than_its_window(device):
    device.fire(device.arm(knots=512)["token"])
    device.turns(ms=1)
    device.heard()
    *blocks, end = device.say(
        device.frame("fetch", {"sweep_id": SWEEP_ID, "first": 0, "count": 200, "a_block": 0})
    )
    assert len(blocks) == 16
    assert end["count"] == 16 * KNOTS_A_BLOCK


@pytest.mark.clause("F9")
def test_a_burst_stops_where_the_host_stops_reading(device):
    device.sweep()
    device.board.write_room = 400
    device.board.incoming += device.frame(
        "fetch", {"sweep_id": SWEEP_ID, "first": 0, "count": 32, "a_block": 0}
    )
    device.service.poll()
    assert len(device.board.sent) == 400
    device.board.write_room = None
    device.board.sent.clear()
    device.decoder.feed(b"\0")
    assert device.say(device.frame("status"))[-1].name == "status_reply"


@pytest.mark.clause("W9", "W10")
def test_a_held_sweep_is_not_written_over(device):
    device.sweep()
    device.turns(lambda: device.state() == "safe")
    assert refusal(device.arm()) == HELD
    assert device.ask("acknowledge", {"sweep_id": OTHER_ID})["freed"] == 0
    assert refusal(device.arm()) == HELD
    assert device.ask("acknowledge", {"sweep_id": SWEEP_ID})["freed"] == 1
    assert device.ask("acknowledge", {"sweep_id": SWEEP_ID})["freed"] == 0
    assert device.arm().name == "arm_reply"


def test_a_repeated_acknowledge_has_the_answer_of_the_first(device):
    device.sweep()
    one = device.ask("acknowledge", {"sweep_id": SWEEP_ID}, sequence=40)
    again = device.ask("acknowledge", {"sweep_id": SWEEP_ID}, sequence=40)
    assert one["freed"] == again["freed"] == 1


def test_without_a_held_sweep_there_is_none_to_read(device):
    assert refusal(device.ask("read_manifest")) == NO_SWEEP
    asked = {"sweep_id": SWEEP_ID, "first": 0, "count": 1, "a_block": 0}
    assert refusal(device.ask("fetch", asked)) == NO_SWEEP
    device.sweep()
    assert refusal(device.ask("fetch", {**asked, "sweep_id": OTHER_ID})) == NO_SWEEP


@pytest.mark.clause("W9")
def test_a_held_sweep_survives_a_new_session(device):
    device.sweep()
    device.hello(nonce=4321)
    assert device.ask("status")["sweep_id"] == SWEEP_ID
    assert device.ask("read_manifest")["knots"] == 32


# -- abort and faults ----------------------------------------------------------------------


@pytest.mark.parametrize("state", list(STATES.values()))
@pytest.mark.clause("A1", "A3")
def test_abort_is_answered_in_every_state_as_often_as_it_comes(device, state):
    device.arm()
    put(device, state)
    after = "safe" if state == "armed" else state
    for _ in range(3):
        (answer,) = device.say(device.abort())
        assert (answer.name, STATES[answer["state"]]) == ("abort_reply", after)
        assert answer.sequence == 0


@pytest.mark.clause("A3")
def test_a_stranger_may_abort(device):
    token = device.arm()["token"]
    (answer,) = device.say(device.frame("abort", session=5, sequence=0))
    assert (answer.name, answer.session) == ("abort_reply", 5)
    assert device.state() == "safe"
    assert refusal(device.fire(token)) == WRONG_STATE


def test_a_fault_is_told_with_its_finding_and_cleared_on_request_alone(device):
    assert refusal(device.ask("clear_fault")) == WRONG_STATE
    device.sequencer.fault((4, 61000, 60000, 1))
    status = device.ask("status")
    found = [status[name] for name in ("guard", "measured", "limit", "unit")]
    assert (STATES[status["state"]], found) == ("fault", [4, 61000, 60000, 1])
    answer = device.arm()
    assert (refusal(answer), answer["guard"], answer["measured"]) == (WRONG_STATE, 4, 61000)
    assert STATES[device.ask("clear_fault")["state"]] == "bleeding"
    device.turns(lambda: device.state() == "safe")
    assert device.arm().name == "arm_reply"


def test_a_fault_keeps_the_sweep_that_was_measured(device):
    device.board.after_closing(3000, lambda: setattr(device.board, "loop_closed", False))
    _, ended = device.sweep()
    assert ended["end_reason"] == 4
    assert device.state() == "fault"
    manifest = device.ask("read_manifest")
    assert (manifest["end_reason"], manifest["knots"]) == (4, 32)
