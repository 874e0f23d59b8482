"""Abort works at any moment, and what it leaves is safe and bled."""

import pytest

from kneewire import framing
from kneewire.messages import pack
from kneewise.errors import DeviceFaultError, RefusedError, TrustError


def closings(board):
    return [entry for entry in board.record if entry[1:] == ("switch_contact", 1)]


def arm(tracer):
    tracer.rest()
    values = {
        "knots": 96,
        "closed_limit_ms": 5000,
        "confirmed": 1,
        "raw_from_us": 0,
        "raw_pairs": 0,
        "limit_mv": 0xFFFFFFFF,
        "limit_ma": 0xFFFFFFFF,
        "exercise": 0,
    }
    return tracer._session.request("arm", values)["token"]


def frame(session, name, sequence, values=None):
    return framing.encode(pack(name, session.session, sequence, values), toward_device=True)


def test_abort_right_behind_the_fire_closes_nothing(bench):
    """Both frames in one read: the abort must win, and the firmware must live on."""
    one = bench("in-process")
    tracer = one.tracer()
    fire = {"token": arm(tracer), "sweep_id": bytes(range(16))}
    session = tracer._session
    session.sequence += 1
    both = frame(session, "fire", session.sequence, fire) + frame(session, "abort", 0)
    session.port.write(both)
    notice = session.wait_notice("charge_ended", 2.0)
    assert notice["end_reason"] == 3
    assert not closings(one.board)
    with pytest.raises(TrustError, match="0 knots"):
        tracer.held()
    assert tracer.sweep().sound


def test_abort_while_charging_opens_and_bleeds(bench, monkeypatch):
    """The operator's stop in mid-charge; what was measured until then is kept, and marked."""
    one = bench("in-process")
    tracer = one.tracer()
    session = tracer._session
    written = type(one.board).capture_written

    def abort_after_5_ms(board):
        pairs = written(board)
        if 1250 <= pairs < 1375:
            session.port.write(framing.DELIMITER + frame(session, "abort", 0))
        return pairs

    monkeypatch.setattr(type(one.board), "capture_written", abort_after_5_ms)
    monkeypatch.setattr("kneewise.emulator.bus._CALLS", patched_calls(abort_after_5_ms))
    trace = tracer.sweep()
    assert trace.end_reason == "aborted"
    assert trace.time[-1] < 0.007
    assert not trace.sound
    assert one.board.bleed_engaged
    assert not one.board.contact_conducting
    assert one.board.capacitor_v < 12.0


def patched_calls(capture_written):
    from kneewise.emulator import bus

    return tuple(
        (name, (lambda b, x, y: capture_written(b)) if name == "capture_written" else call)
        for name, call in bus._CALLS
    )


def test_abort_is_idempotent_in_every_state_but_charging(bench, rung):
    one = bench(rung)
    tracer = one.tracer()
    for _ in range(3):
        assert tracer.rest().state == "safe"
    token = arm(tracer)
    assert tracer.rest().state == "safe"
    with pytest.raises(Exception, match=r"wrong state|bad token"):
        tracer._session.request("fire", {"token": token, "sweep_id": bytes(range(16))})
    assert not closings(one.board)


def test_host_that_vanishes_while_charging(bench):
    """H8: nothing heard for 2 s; the sweep ends, bleeds and is kept."""
    one = bench("in-process", source={"photocurrent_a": 0.05})
    tracer = one.tracer()
    fire = {"token": arm(tracer), "sweep_id": bytes(range(16))}
    tracer._session.request("fire", fire)
    tracer._session.port.sleep(6.0)
    held = tracer.held()
    assert held.end_reason == "host lost"
    assert 1.9 < held.time[-1] < 2.1  # the middle of the last knot
    assert one.board.bleed_engaged


def test_a_dark_source_ends_without_a_curve(bench, rung):
    one = bench(rung, source={"photocurrent_a": 0.0})
    with pytest.raises(TrustError, match="no current"):
        one.tracer().sweep()


def test_stop_switch_opened_while_charging(bench, rung):
    """H12: the lid opened in mid-charge ends it, latches, and loses nothing that was measured."""
    one = bench(rung)
    tracer = one.tracer()
    one.emulated.after_closing(6_000, "stop_loop")
    trace = tracer.sweep()
    assert trace.end_reason == "stop loop opened"
    assert 0.004 < trace.time[-1] < 0.009
    assert trace.residual_capacitor_v < 12.0
    with pytest.raises(DeviceFaultError, match="H12 lid or stop switch open") as caught:
        tracer.sweep()
    assert "close the lid" in caught.value.next_step
    assert "kneewise rest --clear-fault" in caught.value.next_step
    with pytest.raises(RefusedError, match="H12"):
        tracer.clear_fault()
    one.emulated.change("stop_loop", 0)
    with pytest.raises(DeviceFaultError, match="H12"):
        tracer.sweep()
    tracer.clear_fault()
    assert tracer.sweep().sound
