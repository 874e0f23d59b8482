"""The USB plug pulled, in each state: the board is without power and nothing drives a pin.

Contact open and bleed engaged is what wiring and pulls must give by themselves (H21).
"""

import time

import pytest

from kneewise.errors import KneewiseError

SETTLE_US = 30_000  # more than any contact's release time


def arm(tracer):
    values = {
        "knots": 96,
        "closed_limit_ms": 1000,
        "confirmed": 1,
        "raw_from_us": 0,
        "raw_pairs": 0,
        "limit_mv": 0xFFFFFFFF,
        "limit_ma": 0xFFFFFFFF,
        "exercise": 0,
    }
    return tracer._session.request("arm", values)["token"]


def fire_and_look(tracer, token):
    tracer._session.request("fire", {"token": token, "sweep_id": bytes(range(16))})
    tracer._session.wait_notice("charge_ended", 1.0)
    tracer.status()


def assert_safe(one):
    one.board.settle(SETTLE_US)
    assert not one.board.contact_conducting
    assert one.board.bleed_engaged
    levels = {what: level for _, what, level in one.board.record}
    assert levels["relay"] is levels["bleed_release"] is None  # undriven, not driven low
    assert levels.get("relay_contact", 0) == 0


def assert_empties(one):
    """And what is on the capacitor goes through the bleed."""
    one.board.settle(3_000_000)
    assert one.board.capacitor_v < 0.1


def test_while_safe(bench, rung):
    one = bench(rung)
    assert one.tracer().rest().state == "safe"
    one.emulated.unplug()
    assert_safe(one)


def test_while_armed(bench, rung):
    one = bench(rung)
    tracer = one.tracer()
    tracer.rest()
    arm(tracer)
    assert tracer.status().state == "armed"
    one.emulated.unplug()
    assert_safe(one)


@pytest.mark.parametrize("after_us", [0, 1_000, 8_000, 14_000])
def test_while_charging(after_us, bench, rung):
    one = bench(rung)
    tracer = one.tracer()
    tracer.rest()
    one.emulated.after_closing(after_us, "power_off")
    token = arm(tracer)
    with pytest.raises(KneewiseError):
        fire_and_look(tracer, token)
    if hasattr(one.emulated, "wait_power_lost"):
        one.emulated.wait_power_lost()
    lost_us = max(time_us for time_us, what, level in one.board.record if level is None)
    closed_us = [
        time_us
        for time_us, what, level in one.board.record
        if (what, level) == ("switch_contact", 1)
    ]
    assert len(closed_us) == 1
    assert lost_us - closed_us[0] <= after_us + 1
    assert_safe(one)
    assert_empties(one)


def test_while_bleeding(bench, rung, monkeypatch):
    one = bench(rung)
    tracer = one.tracer()
    tracer.rest()
    tracer._session.request("fire", {"token": arm(tracer), "sweep_id": bytes(range(16))})
    tracer._session.wait_notice("charge_ended", 5.0)
    one.emulated.unplug()
    assert_safe(one)
    assert_empties(one)


def test_while_in_fault(bench, rung):
    one = bench(rung, board={"bleed_open": True}, load={"permanent_bleeder_ohm": 1e6})
    tracer = one.tracer()
    tracer.rest()
    tracer._session.request("fire", {"token": arm(tracer), "sweep_id": bytes(range(16))})
    tracer._session.wait_notice("charge_ended", 5.0)
    end = time.monotonic() + 20
    while tracer.status().state != "fault":
        assert time.monotonic() < end
        tracer._session.port.sleep(0.05)
    one.emulated.unplug()
    assert_safe(one)


def test_plugged_in_again_it_boots_safe_and_bleeds(bench, rung):
    """What was left on the capacitor is measured and bled before anything else."""
    one = bench(rung)
    tracer = one.tracer()
    tracer.rest()
    tracer._session.request("fire", {"token": arm(tracer), "sweep_id": bytes(range(16))})
    tracer._session.wait_notice("charge_ended", 5.0)
    one.emulated.unplug()
    tracer.close()
    assert one.board.capacitor_v > 12.0
    one.emulated.plug()
    again = one.tracer()
    assert again.rest().state == "safe"
    assert one.board.capacitor_v < 0.5
    assert again.sweep().sound
