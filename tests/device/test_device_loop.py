"""If these fail, the parts are each right and the tracer is not."""

from __future__ import annotations

import pytest
from fake_board import FakeBoard
from hosting import STATES, SWEEP_ID, Device, refusal, service_module
from test_service import WRONG_STATE

from kneewise.emulator.firmware import firmware_module

charge = firmware_module("tracer.charge")
interlocks = firmware_module("tracer.interlocks")


@pytest.fixture
def device(board, tmp_path):
    return Device(board, tmp_path)


def test_a_sweep_goes_round_from_safe_to_safe(device):
    seen = [device.state()]
    device.fire(device.arm()["token"])
    for _ in range(40):
        device.turns(ms=1)
        if device.state() != seen[-1]:
            seen.append(device.state())
    assert seen == ["safe", "bleeding", "safe"]
    assert device.board.closings == 1
    assert device.board.watchdog_ms == 0


def test_the_manifest_says_what_the_bleed_left_once_it_is_done(device):
    device.sweep()
    assert device.ask("read_manifest")["residual_conversions"] == 0
    device.turns(lambda: device.state() == "safe")
    manifest = device.ask("read_manifest")
    assert manifest["residual_conversions"] == 64
    assert 24 <= manifest["residual_sum"] / 64 <= 24 + 13
    # What is read later, with the capacitor creeping, is not this sweep's.
    device.board.capacitor_v = 0.19
    device.turns(ms=300)
    assert device.ask("read_manifest")["residual_sum"] == manifest["residual_sum"]


def test_after_a_fault_the_manifest_never_tells_the_reading_from_before_the_charge(device):
    device.turns(ms=300)
    device.board.bleed_broken = True
    device.board.after_closing(3000, lambda: setattr(device.board, "loop_closed", False))
    device.sweep()
    assert device.state() == "fault"
    volt = device.board.capacitor_v
    assert volt > 20.0
    device.turns(ms=200)
    manifest = device.ask("read_manifest")
    assert manifest["residual_conversions"] == 64
    # Its bleed is broken; the permanent bleeder has taken 4 % meanwhile.
    left = 24 + device.board.capacitor_v / 0.0165
    assert left - 1 <= manifest["residual_sum"] / 64 <= left * 1.03
    assert device.board.capacitor_v < volt


@pytest.mark.parametrize("split", range(1, 14))
def test_an_abort_right_behind_the_fire_closes_nothing(device, split):
    token = device.arm()["token"]
    fire = device.frame("fire", {"token": token, "sweep_id": SWEEP_ID})
    device.board.incoming += fire + b"\0" + device.abort()[:split]
    device.board.at(1000, lambda: device.board.incoming.extend(device.abort()[split:]))
    device.turns(ms=1)
    answers = device.heard()
    assert [answer.name for answer in answers[:2]] == ["fire_reply", "charge_ended"]
    assert answers[1]["end_reason"] == charge.ABORTED
    assert device.board.closings == 0
    # The abort is answered too, once there is quiet no longer.
    assert answers[2].name == "abort_reply"
    device.turns(lambda: device.state() == "safe")
    assert device.state() == "safe"


@pytest.mark.parametrize("name", ["hello", "arm", "prompt", "status"])
def test_a_request_right_behind_the_fire_is_answered_after_the_charge(device, name):
    token = device.arm()["token"]
    values = {
        "hello": {"major": 0, "minor": 1, "fingerprint": 5, "host_nonce": 99},
        "arm": {
            "knots": 16,
            "closed_limit_ms": 1,
            "confirmed": 1,
            "raw_from_us": 0,
            "raw_pairs": 0,
            "limit_mv": 0xFFFFFFFF,
            "limit_ma": 0xFFFFFFFF,
            "exercise": 0,
        },
    }.get(name)
    fire = device.frame("fire", {"token": token, "sweep_id": SWEEP_ID})
    device.board.incoming += fire + device.frame(name, values)
    try:
        device.turns(ms=1)
    except service_module.Leave:
        assert name == "prompt"
    fired, ended, answer = device.heard()
    assert (fired.name, ended["end_reason"]) == ("fire_reply", charge.COMPLETE)
    assert device.board.closings == 1
    assert device.loop.held.count == 32
    if name == "arm":
        assert refusal(answer) == WRONG_STATE


@pytest.mark.clause("W6")
def test_what_was_asked_during_the_charge_is_answered_after_it(device):
    device.board.after_closing(3000, lambda: device.board.incoming.extend(device.frame("status")))
    _, ended, answer = device.sweep()
    assert ended["end_reason"] == charge.COMPLETE
    assert answer.name == "status_reply"


def test_an_aborted_sweep_is_held_as_one(device):
    device.board.after_closing(3000, lambda: device.board.incoming.extend(b"\0" + device.abort()))
    _, ended, answer = device.sweep()
    assert ended["end_reason"] == charge.ABORTED
    assert answer.name == "abort_reply"
    assert device.ask("read_manifest")["end_reason"] == charge.ABORTED


@pytest.mark.clause("W8")
def test_the_end_of_the_bleed_is_told_once_for_each_sweep(device):
    device.sweep()
    assert device.bled == []
    device.turns(ms=3000)
    device.heard()
    (told,) = device.bled
    assert told["sweep_id"] == SWEEP_ID
    assert (STATES[told["state"]], device.state()) == ("safe", "safe")


@pytest.mark.clause("W13", "R3", "R4")
def test_after_ctrl_c_in_mid_charge_the_sweep_so_far_is_held_and_the_session_goes_on(device):
    def interrupt(*values):
        del board.capture_written
        raise KeyboardInterrupt

    board = device.board
    device.fire(device.arm()["token"])
    board.after_closing(3000, lambda: setattr(board, "capture_written", interrupt))
    with pytest.raises(KeyboardInterrupt):
        device.loop.run()
    (ended,) = device.heard()
    assert ended["end_reason"] == charge.INTERRUPTED
    assert (board.relay_closed, board.bleed_engaged, board.quiet) == (False, True, False)
    capacitor_v = board.capacitor_v
    assert capacitor_v > 5
    # Re-entered from the prompt: nothing is taken as empty before it is measured.
    board.incoming += device.frame("prompt")
    device.loop.run()
    device.heard()
    assert device.state() == "bleeding"
    manifest = device.ask("read_manifest")
    assert (manifest["sweep_id"], manifest["end_reason"]) == (SWEEP_ID, charge.INTERRUPTED)
    assert 500 <= manifest["pairs"] <= 1000
    assert manifest["knots"] == 32
    device.turns(ms=3000)
    device.heard()
    assert [STATES[told["state"]] for told in device.bled] == ["safe"]


def test_before_the_capture_ctrl_c_leaves_a_sweep_without_pairs_not_the_last_one(device):
    device.sweep()
    device.turns(lambda: device.state() == "safe")
    device.ask("acknowledge", {"sweep_id": SWEEP_ID})
    device.fire(device.arm()["token"], bytes(16)[:-1] + b"2")

    def interrupt(*values):
        del device.board.bleed
        raise KeyboardInterrupt

    device.board.bleed = interrupt
    with pytest.raises(KeyboardInterrupt):
        device.loop.run()
    device.heard()
    manifest = device.ask("read_manifest")
    assert (manifest["pairs"], manifest["knots"], manifest["ring_overruns"]) == (0, 0, 0)


def test_ctrl_c_between_an_accepted_fire_and_its_charge_closes_nothing_and_says_so(device):
    token = device.arm()["token"]
    plain = device.board.link_write

    def interrupt(data):
        device.board.link_write = plain
        raise KeyboardInterrupt

    device.board.link_write = interrupt
    values = {"token": token, "sweep_id": SWEEP_ID}
    device.board.incoming += device.frame("fire", values)
    with pytest.raises(KeyboardInterrupt):
        device.loop.run()
    device.board.incoming += device.frame("prompt")
    device.loop.run()
    device.heard()
    assert device.board.closings == 0
    manifest = device.ask("read_manifest")
    assert (manifest["sweep_id"], manifest["knots"]) == (SWEEP_ID, 0)
    assert manifest["end_reason"] == charge.INTERRUPTED


def test_a_request_that_ctrl_c_cut_short_may_be_sent_again(device):
    def interrupt(*values):
        del device.board.read
        raise KeyboardInterrupt

    values = {
        "knots": 32,
        "closed_limit_ms": 1000,
        "confirmed": 1,
        "raw_from_us": 0,
        "raw_pairs": 0,
        "limit_mv": 0xFFFFFFFF,
        "limit_ma": 0xFFFFFFFF,
        "exercise": 0,
    }
    frame = device.frame("arm", values)
    device.board.read = interrupt
    device.board.incoming += frame
    with pytest.raises(KeyboardInterrupt):
        device.loop.run()
    device.loop.left = False
    device.loop.sequencer.resume()
    device.turns(device.rested)
    device.heard()
    (answer,) = device.say(frame)
    assert answer.name == "arm_reply"


def test_a_second_ctrl_c_in_the_end_of_a_charge_leaves_no_capture_running(device):
    board = device.board
    plain = type(board).capture_stop
    calls = []

    def first(*values):
        del board.capture_written
        raise KeyboardInterrupt

    def second():
        calls.append(1)
        if len(calls) == 1:
            raise KeyboardInterrupt
        return plain(board)

    board.capture_stop = second
    device.fire(device.arm()["token"])
    board.after_closing(3000, lambda: setattr(board, "capture_written", first))
    with pytest.raises(KeyboardInterrupt):
        device.loop.run()
    assert board.pairs is None
    assert board.supervised_us is None


def test_a_latched_weld_keeps_the_bleed_released_over_the_prompt(device):
    device.board.welded = True
    device.board.capacitor_v = device.board.source_v
    device.turns(lambda: device.state() == "fault", ms=20_000)
    device.board.safe()  # as main.py leaves the pins
    device.loop.sequencer.resume()
    assert device.state() == "fault"
    assert not device.board.bleed_engaged


def test_a_dark_source_gives_a_sweep_without_knots(device):
    device.board.source_a = 0.0
    _, ended = device.sweep()
    assert ended["end_reason"] == charge.NO_CURRENT
    manifest = device.ask("read_manifest")
    assert (manifest["knots"], manifest["pairs"]) == (0, 0)


def test_leaving_to_the_prompt_leaves_a_safe_board_without_watchdog(device):
    device.sweep()
    device.board.incoming += device.frame("prompt")
    device.loop.run()
    assert (device.board.relay_closed, device.board.bleed_engaged) == (False, True)
    assert device.board.watchdog_ms == 0


@pytest.mark.parametrize("kind", [KeyboardInterrupt, OSError, SystemExit])
@pytest.mark.parametrize("broken", ["wait_us", "capture_written", "trips", "link_read"])
@pytest.mark.clause("R4")
def test_an_error_in_mid_charge_leaves_the_loop_with_a_safe_board(device, kind, broken):
    board = device.board

    def breaks(*values):
        raise kind("broken")

    device.fire(device.arm()["token"])
    board.after_closing(3000, lambda: setattr(board, broken, breaks))
    with pytest.raises(kind):
        device.loop.run()
    assert board.closings == 1
    assert not board.conducting
    assert (board.relay_closed, board.bleed_engaged) == (False, True)
    assert board.watchdog_ms == 0


def test_one_failed_attempt_to_make_safe_is_followed_by_another(device):
    board = device.board
    real = FakeBoard.safe
    failures = [OSError("once"), OSError("twice")]

    def safe():
        if failures:
            raise failures.pop()
        real(board)

    def pulse(us):
        if us == 0:
            raise OSError("pulse")
        FakeBoard.pulse(board, us)

    device.fire(device.arm()["token"])
    board.safe, board.pulse = safe, pulse
    with pytest.raises(OSError, match=r"once|twice|pulse"):
        device.loop.run()
    assert (board.relay_closed, board.bleed_engaged) == (False, True)
    assert not board.conducting
