"""A scout sweep steers the one after it, and tells when the light has changed between them."""

import pytest

from kneewise import FullRate, Tracer
from kneewise.errors import TrustError

SHADED = {"photocurrent_a": 3.1, "series_resistance_ohm": 0.6}


def closings(one):
    return sum(what == "relay" and level == 1 for _, what, level in one.board.record)


@pytest.mark.parametrize("source", [None, SHADED], ids=["clear noon", "low light"])
def test_the_pairs_kept_are_those_about_the_maximum(source, bench, rung):
    """A stretch that misses the knee is a sweep for nothing."""
    one = bench(rung, source=source) if source else bench(rung)
    tracer = one.tracer()
    trace = tracer.sweep(scout=True, knots=64)
    truth = one.emulated.scenario.build_source().truth()
    assert trace.sound, [check for check in trace.checks if not check.holds]
    assert trace.checks[-1].name == "agrees with the scout sweep"
    assert (len(trace.scout.raw), len(trace.raw)) == (32, 64)
    assert trace.scout.trace_id != trace.trace_id
    kept = trace.full_rate
    assert len(kept) == 2048
    before = kept.voltage[:100].mean()
    behind = kept.voltage[-100:].mean()
    assert before < truth["vmp"] - 0.5
    assert behind > truth["vmp"] + 0.5
    middle = sum(kept.stretch_s) / 2
    at = float(trace.time[(trace.voltage * trace.current).argmax()])
    assert middle == pytest.approx(at, abs=1e-3)
    # Both were acknowledged, and each closed the contact once.
    assert closings(one) == 2
    assert tracer.status().held_sweep == ""


def test_the_second_may_last_little_longer_than_the_first(bench, rung):
    one = bench(rung)
    tracer = one.tracer()
    asked = []
    request = tracer._session.request

    def listen(name, values=None, **more):
        if name == "arm":
            asked.append((values["knots"], values["closed_limit_ms"], values["raw_pairs"]))
        return request(name, values, **more) if values is not None else request(name, **more)

    tracer._session.request = listen
    trace = tracer.sweep(scout=True, limit_s=5.0, full_rate=FullRate(duration_s=0.004))
    first, second = asked
    assert first == (32, 5000, 0)
    assert second[0] == 96
    assert second[1] == pytest.approx(2 * 0.004 * trace.scout.integrity.pairs + 20, abs=1)
    assert second[2] == 1000


def test_a_stretch_of_ones_own_stays_where_it_is(bench, rung):
    trace = (
        bench(rung).tracer().sweep(scout=True, full_rate=FullRate(start_s=0.001, duration_s=0.002))
    )
    assert trace.full_rate.stretch_s == pytest.approx((0.001, 0.003))


def test_about_the_maximum_needs_a_scout_and_gets_one(bench, rung):
    trace = bench(rung).tracer().sweep(full_rate=FullRate(duration_s=0.002))
    assert trace.scout is not None
    assert len(trace.full_rate) == 500


def test_a_change_of_light_between_the_two_shows(bench, rung):
    """2 % less light at the second: figures as good as any, of another moment."""
    one = bench(rung)

    def cloud(stage):
        if stage == "getting ready":
            one.emulated.change("source", {"irradiance_w_m2": 980.0})

    kept = []
    trace = one.tracer().sweep(scout=True, progress=cloud, keep=kept.append)
    (failed,) = (check for check in trace.checks if not check.holds)
    assert failed.name == "agrees with the scout sweep"
    assert "Isc -2.0" in failed.found
    assert kept == [trace]


def test_a_scout_that_is_not_sound_stops_it(bench, rung):
    """Steered by half a curve, the sweep would look for the knee in the wrong place."""
    one = bench(rung)
    tracer = one.tracer()
    kept = []
    with pytest.raises(TrustError) as caught:
        tracer.sweep(scout=True, limit_s=0.006, keep=kept.append)
    assert caught.value.what.startswith("scout sweep ")
    assert "ended by itself: time limit" in caught.value.found
    assert "or sweep without a scout" in caught.value.next_step
    assert closings(one) == 1
    (scout,) = kept
    assert not scout.sound
    assert tracer.status().held_sweep == ""
    assert tracer.sweep(scout=True).sound


def test_a_dark_source_stops_at_the_scout(bench, rung):
    one = bench(rung, source={"photocurrent_a": 0.0})
    with pytest.raises(TrustError, match=r"no current.*lit and connected"):
        one.tracer().sweep(scout=True)
    assert closings(one) == 1


def test_light_that_goes_before_the_second_is_told_as_such(bench, rung):
    """The second's limit is over before the device calls a source dark."""
    one = bench(rung)

    def gone(stage):
        if stage == "getting ready":
            one.emulated.after_closing(0, "source", {"photocurrent_a": 0.0})

    with pytest.raises(TrustError, match="lit and connected"):
        one.tracer().sweep(scout=True, progress=gone)


def test_a_recording_of_both_plays_again(tmp_path):
    file = tmp_path / "both.jsonl"
    with Tracer.open("emulator:in-process", record=file) as tracer:
        trace = tracer.sweep(scout=True)
    with Tracer.open(f"replay:{file}") as tracer:
        again = tracer.sweep(scout=True)
    assert (again.raw.voltage_sum == trace.raw.voltage_sum).all()
    assert (again.full_rate.raw.voltage == trace.full_rate.raw.voltage).all()
    assert (again.scout.raw.voltage_sum == trace.scout.raw.voltage_sum).all()
