"""The link goes at the worst moments; the sweep must arrive whole or the gap be told."""

import pytest
from rig import knots_alike

from kneewise import FullRate
from kneewise.errors import (
    ArchiveError,
    KneewiseError,
    LinkError,
    OutcomeUnknownError,
    TrustError,
)
from kneewise.instrument.sweep import Reassembly


class Refuse:
    """A `keep` that fails, as a full disk does: the sweep stays held."""

    def __init__(self):
        self.trace = None

    def __call__(self, trace):
        self.trace = trace
        raise ArchiveError("storing", found="a full disk", expected="room", next_step="make room")


def cut_and_join(emulated):
    emulated.cut_link()
    if hasattr(emulated, "join_link"):
        emulated.join_link()


# Blocks: 16 of knots, then 26 of pairs kept one by one.
@pytest.mark.clause("W9", "K7", "K8")
@pytest.mark.parametrize("cut_at", [1, 3, 9, 17, 40])
def test_cut_in_the_middle_of_the_transfer(cut_at, bench, rung, monkeypatch):
    """A loose plug would cost the sweep, or worse, change it."""
    one = bench(rung)
    tracer = one.tracer()
    refuse = Refuse()
    with pytest.raises(ArchiveError):
        tracer.sweep(full_rate=FullRate(start_s=0.002, duration_s=0.006), keep=refuse)
    undisturbed = refuse.trace

    blocks = []
    take = Reassembly.take

    def cutting(reassembly, block):
        take(reassembly, block)
        blocks.append(block["first"])
        if len(blocks) == cut_at:
            cut_and_join(one.emulated)

    monkeypatch.setattr(Reassembly, "take", cutting)
    kept = []
    held = tracer.held(keep=kept.append)
    assert len(blocks) > 42
    assert held is kept[0]
    assert held.trace_id == undisturbed.trace_id
    assert knots_alike(held, undisturbed)
    assert (held.raw.time_us == undisturbed.raw.time_us).all()
    pairs = held.full_rate.raw
    assert len(pairs) == 1500
    assert (pairs.voltage == undisturbed.full_rate.raw.voltage).all()
    assert (pairs.current == undisturbed.full_rate.raw.current).all()
    assert held.integrity.manifest_crc_ok
    assert tracer.status().held_sweep == ""


@pytest.mark.clause("W11", "W12")
def test_a_lost_block_is_asked_for_again(bench, rung, monkeypatch):
    """One damaged frame would cost the whole sweep."""
    take = Reassembly.take
    seen = []

    def losing(reassembly, block):
        seen.append(block["first"])
        if len(seen) not in (2, 3, 7):
            take(reassembly, block)

    monkeypatch.setattr(Reassembly, "take", losing)
    trace = bench(rung).tracer().sweep()
    assert trace.integrity.blocks_resent == 3
    assert trace.integrity.manifest_crc_ok


def test_another_host_finds_the_held_sweep(bench, rung):
    """A laptop that dies after the sweep would take the sweep with it."""
    one = bench(rung)
    refuse = Refuse()
    first = one.tracer()
    with pytest.raises(ArchiveError):
        first.sweep(keep=refuse)
    first.close()
    held = one.tracer().held()
    assert knots_alike(held, refuse.trace)


def test_a_sweep_held_is_not_overwritten(bench, rung):
    one = bench(rung)
    tracer = one.tracer()
    with pytest.raises(ArchiveError):
        tracer.sweep(keep=Refuse())
    with pytest.raises(KneewiseError, match="another sweep is held"):
        tracer.sweep()


@pytest.mark.clause("W14", "H4")
def test_reset_after_fire_is_outcome_unknown_and_never_a_second_fire(bench, rung, monkeypatch):
    """After a reset the host cannot know whether the contact closed: it must not close it."""
    one = bench(rung)
    tracer = one.tracer()
    wait = type(tracer._session).wait_quiet

    def reset_instead(session, *args):
        one.emulated.unplug()
        one.emulated.plug()
        return wait(session, *args)

    monkeypatch.setattr(type(tracer._session), "wait_quiet", reset_instead)
    closings = [entry for entry in one.board.record if entry[1:] == ("pulse", 1)]
    with pytest.raises(OutcomeUnknownError, match="reset after it was told to fire"):
        tracer.sweep()
    closings = [entry for entry in one.board.record if entry[1:] == ("pulse", 1)]
    assert len(closings) <= 1


def test_a_session_that_the_device_does_not_know_is_opened_anew_and_the_sweep_fetched(
    bench, rung, monkeypatch
):
    one = bench(rung)
    tracer = one.tracer()
    wait = type(tracer._session).wait_quiet

    def forget(session, *args):
        found = wait(session, *args)
        session.session ^= 1
        return found

    monkeypatch.setattr(type(tracer._session), "wait_quiet", forget)
    trace = tracer.sweep()
    assert trace.sound
    closings = [entry for entry in one.board.record if entry[1:] == ("switch_contact", 1)]
    assert len(closings) == 1


def test_without_power_the_port_is_lost(bench, rung):
    one = bench(rung)
    tracer = one.tracer()
    one.emulated.unplug()
    with pytest.raises(LinkError):
        tracer.status()


@pytest.mark.clause("T2")
def test_a_clock_probe_that_was_sent_twice_is_not_used(bench, monkeypatch):
    tracer = bench("in-process").tracer()
    session = tracer._session
    plain = type(session).request

    def doubled(self, name, *args, **more):
        if name == "heartbeat":
            self.frames.counters.sent_again += 1
        return plain(self, name, *args, **more)

    monkeypatch.setattr(type(session), "request", doubled)
    with pytest.raises(LinkError) as caught:
        tracer.sweep(knots=16)
    assert caught.value.what.startswith("setting the clock by")
    assert caught.value.found.startswith("no answer at the first asking in 40 tries (")
    assert caught.value.expected == "one at the least"
    assert caught.value.next_step == "use a shorter or better cable; the sweep is still held"
    monkeypatch.undo()
    assert tracer.held() is not None


def test_another_sweep_in_the_place_of_ours_is_told(bench, monkeypatch):
    """Another program has fetched ours, and made one of its own."""
    one = bench("in-process")
    tracer = one.tracer()
    session = tracer._session
    plain = type(session).request

    def another(self, name, *args, **more):
        reply = plain(self, name, *args, **more)
        if name == "read_manifest":
            reply.values["sweep_id"] = bytes(15) + b"\x09"
        return reply

    monkeypatch.setattr(type(session), "request", another)
    with pytest.raises(TrustError) as caught:
        tracer.sweep(knots=16)
    assert caught.value.found == f"the device holds {'00' * 15}09"
    assert caught.value.expected == "this sweep"
    assert caught.value.next_step.startswith("sweep again; another program may be talking")
