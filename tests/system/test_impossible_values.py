"""If these fail, a device that sends what cannot be shows its user a traceback."""

from __future__ import annotations

import contextlib
import math

import pytest

from kneewise import FullRate
from kneewise.errors import KneewiseError, TrustError
from kneewise.link.session import Session


def changed(monkeypatch, kind, **changes):
    """Let replies of a kind arrive with other values, their CRC right."""
    plain = Session.request

    def request(session, name, *args, **more):
        reply = plain(session, name, *args, **more)
        if name == kind:
            reply.values.update(changes)
        return reply

    monkeypatch.setattr(Session, "request", request)


@pytest.mark.clause("B7")
def test_a_state_that_this_host_does_not_know_is_shown_as_its_number(bench, monkeypatch):
    tracer = bench("in-process").tracer()
    changed(monkeypatch, "status", state=77)
    assert tracer.status().state == "state 77"


def test_a_reading_over_no_conversions_is_no_number(bench, monkeypatch):
    tracer = bench("in-process").tracer()
    changed(monkeypatch, "status", conversions=0)
    assert math.isnan(tracer.status().source_v)


@pytest.mark.parametrize(
    "changes",
    [
        {"conversions": 0},
        {"knots": 0},
        {"knots": 3},
        {"pair_ns": 0},
        {"end_reason": 200},
        {"conducting_us": 2**63},
    ],
)
def test_a_manifest_that_cannot_be_is_an_error_of_ours_or_an_unsound_trace(
    bench, monkeypatch, changes
):
    tracer = bench("in-process").tracer()
    changed(monkeypatch, "read_manifest", **changes)
    with contextlib.suppress(KneewiseError):
        trace = tracer.sweep(knots=16)
        assert not trace.sound or "pair_ns" in changes


@pytest.mark.parametrize(
    "changes",
    [
        {"raw_first": 2**32 - 1},
        {"raw_first": 251},  # one pair further on than they were
        {"zero_conversions": 1},
        {"voltage_zero_sum": 0},
        {"voltage_zero_sum": 2**32 - 1},
    ],
)
def test_pairs_and_zeros_that_cannot_be_make_a_trace_unsound(bench, monkeypatch, changes):
    tracer = bench("in-process").tracer()
    changed(monkeypatch, "read_manifest", **changes)
    trace = tracer.sweep(full_rate=FullRate(start_s=0.001, duration_s=0.004))
    assert not trace.sound
    assert len(trace.full_rate.voltage) == 1000


@pytest.mark.parametrize("changes", [{"skew_ns": 2**32 - 1}, {"bounces": 65535}])
def test_what_else_a_manifest_may_hold_is_no_traceback(bench, monkeypatch, changes):
    tracer = bench("in-process").tracer()
    changed(monkeypatch, "read_manifest", **changes)
    trace = tracer.sweep(full_rate=FullRate(start_s=0.001, duration_s=0.004))
    assert len(trace.full_rate.voltage) == len(trace.full_rate.current) == 1000


@pytest.mark.parametrize("changes", [{"replied_us": 2**63}, {"received_us": 2**63}])
def test_a_time_that_cannot_be_is_an_error_of_ours(bench, monkeypatch, changes):
    tracer = bench("in-process").tracer()
    changed(monkeypatch, "heartbeat", **changes)
    with pytest.raises(TrustError) as caught:
        tracer.sweep(knots=16)
    assert caught.value.what.startswith("setting the clock by")
    assert caught.value.expected == "times since the device's boot"


@pytest.mark.parametrize("name", ["capacitance_nf", "voltage_nv_per_code"])
def test_a_profile_without_a_scale_is_an_error_of_ours(bench, name):
    tracer = bench("in-process").tracer()
    tracer.profile[name] = 0
    with pytest.raises((TrustError, KneewiseError)) as caught:
        tracer.sweep(knots=16)
    assert caught.value.next_step
