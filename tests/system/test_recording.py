"""Sessions recorded and replayed: what was measured once can be looked into as often as needed."""

import json
import time
from dataclasses import replace
from datetime import datetime

import pytest
from rig import knots_alike

from kneewise import FullRate
from kneewise.emulator.opener import connector
from kneewise.errors import (
    ArchiveError,
    LinkError,
    OutcomeUnknownError,
    RefusedError,
    TrustError,
    UsageError,
)
from kneewise.instrument import sweep as sweep_module
from kneewise.instrument.opened import Opened
from kneewise.instrument.sweep import Reassembly
from kneewise.instrument.tracer import Tracer
from kneewise.link.recording import OPENED, Recorder, read_recording


@pytest.fixture
def file(tmp_path):
    return tmp_path / "session.jsonl"


def recording_tracer(one, file):
    """The host's tracer on a bench, recorded."""
    opened = Opened(connect=connector(one.emulated), close=lambda: None, rung=one.emulated.rung)
    return Tracer(opened, recorder=Recorder(file, "a bench"))


def replayed(file, **options):
    with Tracer.open(f"replay:{file}") as tracer:
        return tracer.sweep(**options)


def lines_of(file):
    return [json.loads(line) for line in file.read_text(encoding="utf-8").splitlines()]


def same(one, other):
    """True where two traces hold the same measurement, to the last code and microsecond."""
    alike = knots_alike(one, other) and (one.raw.time_us == other.raw.time_us).all()
    return alike and pairs_of(one) == pairs_of(other)


def pairs_of(trace):
    """What was kept one by one, or None."""
    if trace.full_rate is None:
        return None
    raw = trace.full_rate.raw
    return raw.first, raw.voltage.tolist(), raw.current.tolist()


def four_parts(error, what, found, expected, next_step):
    """The message has these words where they belong."""
    assert what in error.what
    assert found in error.found
    assert expected in error.expected
    assert next_step in error.next_step


# -- the same measurement again ----------------------------------------------------------------


def test_a_recorded_sweep_replays_to_the_same_trace(bench, rung, file, monkeypatch):
    """A curve that nobody can go back to cannot be defended."""
    with recording_tracer(bench(rung), file) as tracer:
        trace = tracer.sweep(knots=96)

    def no_waiting(seconds):
        raise AssertionError(f"a replay slept for {seconds} s")

    monkeypatch.setattr(time, "sleep", no_waiting)
    with Tracer.open(f"replay:{file}") as tracer:
        again = tracer.sweep()
        passed_s = tracer._session.port.clock()
    assert same(trace, again)
    assert again.figures() == trace.figures()
    assert again.integrity == trace.integrity
    assert again.checks == trace.checks
    assert (again.rung, again.label, again.emulated) == ("replay", "EMULATED, REPLAYED", True)
    assert trace.label == "EMULATED"
    # The charge and the bleed have passed on the replay's own clock.
    assert passed_s > 0.05


STRETCH = FullRate(start_s=0.002, duration_s=0.006)


def test_pairs_kept_one_by_one_replay_as_they_were(bench, rung, file):
    with recording_tracer(bench(rung), file) as tracer:
        trace = tracer.sweep(full_rate=STRETCH)
        plain = tracer.sweep()
    with Tracer.open(f"replay:{file}") as tracer:
        again = tracer.sweep(full_rate=STRETCH)
        # The second sweep of the recording had none, whatever is asked for now.
        other = tracer.sweep(full_rate=FullRate(start_s=0.001))
    assert len(trace.full_rate) == 1500
    assert same(trace, again)
    assert again.checks == trace.checks
    assert same(plain, replace(other, full_rate=None))
    assert len(other.full_rate) == 0


@pytest.mark.parametrize("a_block", [1, 7])
def test_a_host_that_asks_for_other_blocks_gets_the_same_pairs(a_block, bench, file, monkeypatch):
    with recording_tracer(bench("in-process"), file) as tracer:
        trace = tracer.sweep(full_rate=STRETCH)
    monkeypatch.setattr(sweep_module, "RAW_A_BLOCK", a_block)
    assert same(trace, replayed(file, full_rate=STRETCH))


def test_a_replay_tells_when_it_was_measured_not_when_it_was_replayed(bench, file):
    with recording_tracer(bench("in-process"), file) as tracer:
        uncertainty_s = tracer.sweep().started_uncertainty_s
    recording = read_recording(file)
    one, two = replayed(file), replayed(file)
    assert one.started_utc == two.started_utc
    assert one.started_uncertainty_s == pytest.approx(uncertainty_s)
    started = datetime.fromisoformat(one.started_utc)
    after_s = (started - recording.begun_utc).total_seconds()
    assert 0.0 < after_s < 1.0
    assert one.trace_id != two.trace_id


@pytest.mark.parametrize("a_block", [1, 4])
def test_a_host_that_asks_for_other_blocks_gets_the_same_knots(a_block, bench, file, monkeypatch):
    """A recording would serve one version of the host alone."""
    with recording_tracer(bench("in-process"), file) as tracer:
        trace = tracer.sweep(knots=128)
    monkeypatch.setattr(sweep_module, "KNOTS_A_BLOCK", a_block)
    assert same(trace, replayed(file))


def test_several_sweeps_replay_in_their_order(bench, file):
    with recording_tracer(bench("in-process"), file) as tracer:
        traces = [tracer.sweep(knots=knots) for knots in (48, 96, 64)]
    with Tracer.open(f"replay:{file}") as tracer:
        again = [tracer.sweep() for _ in traces]
        # What was done last is what is told from there on.
        once_more = tracer.sweep()
    assert all(same(one, other) for one, other in zip(traces, again, strict=True))
    assert same(traces[-1], once_more)


def test_a_look_at_the_state_first_does_not_skip_a_sweep(bench, file):
    """The command line asks for a held sweep first, a script may not have."""
    with recording_tracer(bench("in-process"), file) as tracer:
        first = tracer.sweep(knots=48)
        tracer.sweep(knots=96)
    with Tracer.open(f"replay:{file}") as tracer:
        for _ in range(5):
            tracer.status()
        assert tracer.held() is None
        assert same(first, tracer.sweep())


def test_a_sweep_that_was_held_is_held_in_the_replay(bench, file):
    one = bench("in-process")

    def refuse(trace):
        raise ArchiveError("storing", found="a full disk", expected="room", next_step="make room")

    with pytest.raises(ArchiveError), recording_tracer(one, file.with_name("first")) as tracer:
        tracer.sweep(keep=refuse)
    with recording_tracer(one, file) as tracer:
        held = tracer.held()
    with Tracer.open(f"replay:{file}") as tracer:
        again = tracer.held()
    assert held.trace_id == again.trace_id
    assert same(held, again)


def test_a_refusal_replays_with_its_guard(bench, file):
    one = bench("in-process", board={"leads_reversed": True})
    with recording_tracer(one, file) as tracer, pytest.raises(RefusedError) as first:
        tracer.sweep()
    with pytest.raises(RefusedError) as again:
        replayed(file)
    assert str(again.value) == str(first.value)
    assert again.value.guard == 5


def test_a_dark_source_replays_as_no_curve(bench, file):
    one = bench("in-process", source={"photocurrent_a": 0.0})
    with recording_tracer(one, file) as tracer, pytest.raises(TrustError) as first:
        tracer.sweep()
    with pytest.raises(TrustError) as again:
        replayed(file)
    assert (again.value.found, again.value.expected) == (first.value.found, first.value.expected)


def test_a_long_charge_replays_with_its_heartbeats(bench, file):
    with recording_tracer(bench("in-process", source={"photocurrent_a": 0.05}), file) as tracer:
        trace = tracer.sweep(limit_s=20.0)
    assert trace.time[-1] > 2.0
    again = replayed(file)
    assert same(trace, again)


# -- links that were bad -----------------------------------------------------------------------


# Blocks: 16 of knots, then 26 of pairs.
@pytest.mark.parametrize("cut_at", [1, 9, 17, 40])
def test_a_recording_goes_on_after_a_lost_link(cut_at, bench, rung, file, monkeypatch):
    """The very sessions that go wrong are those that somebody wants to look into."""
    one = bench(rung)
    take = Reassembly.take
    blocks = []

    def cutting(reassembly, block):
        take(reassembly, block)
        blocks.append(block)
        if len(blocks) == cut_at:
            one.emulated.cut_link()
            if hasattr(one.emulated, "join_link"):
                one.emulated.join_link()

    with monkeypatch.context() as patched, recording_tracer(one, file) as tracer:
        patched.setattr(Reassembly, "take", cutting)
        trace = tracer.sweep(full_rate=STRETCH)
    assert [line for line in lines_of(file) if line.get("event")] != []
    assert [chunk.way for chunk in read_recording(file).chunks].count(OPENED) >= 1
    assert len(trace.full_rate) == 1500
    again = replayed(file, full_rate=STRETCH)
    assert same(trace, again)
    assert again.figures() == trace.figures()


def test_a_reset_after_the_fire_replays_as_outcome_unknown(bench, file, monkeypatch):
    one = bench("in-process")
    tracer = recording_tracer(one, file)
    wait = type(tracer._session).wait_quiet

    def reset_instead(session, *args):
        one.emulated.unplug()
        one.emulated.plug()
        return wait(session, *args)

    with monkeypatch.context() as patched, tracer:
        patched.setattr(type(tracer._session), "wait_quiet", reset_instead)
        with pytest.raises(OutcomeUnknownError) as first:
            tracer.sweep()
    with pytest.raises(OutcomeUnknownError) as again:
        replayed(file)
    assert again.value.found == first.value.found
    four_parts(again.value, "sweep ", "reset after it was told to fire", "the device", "capacitor")


def with_lines(file, name, lines):
    """A recording of these lines beside `file`."""
    changed = file.with_name(name)
    changed.write_text("".join(json.dumps(line) + "\n" for line in lines), encoding="utf-8")
    return changed


@pytest.mark.parametrize("noise", [b"\x07damaged\xff\xfe\x00", b"hardware: relay chatters\r\n\x00"])
def test_damage_and_text_replay_where_they_were(noise, bench, file):
    with recording_tracer(bench("in-process"), file) as tracer:
        trace = tracer.sweep()
    lines = lines_of(file)
    place = next(i for i, line in enumerate(lines) if line.get("to") == "host") + 2
    lines.insert(place, {"t": lines[place]["t"], "to": "host", "hex": noise.hex()})
    with Tracer.open(f"replay:{with_lines(file, 'noisy.jsonl', lines)}") as tracer:
        again = tracer.sweep()
        counters, said = tracer.frames.counters, tracer._session.text
    assert same(trace, again)
    assert (counters.bad, counters.texts) == ((0, 1) if b"relay" in noise else (1, 0))
    assert ("relay chatters" in said) == (b"relay" in noise)
    assert again.integrity.frames_bad == counters.bad


def test_a_prompt_replays_and_is_left_as_it_was(bench, file):
    with recording_tracer(bench("in-process"), file) as tracer:
        trace = tracer.sweep()
    lines = lines_of(file)
    hello = [line for line in lines if line.get("t") is not None][:2]
    # Instead of the profile a prompt shows itself; the host leaves it and greets anew.
    place = next(i for i, line in enumerate(lines) if line.get("to") == "device") + 2
    asked = lines[place]
    prompt = {"t": asked["t"], "to": "host", "hex": b"\r\nMicroPython v1\r\n>>> ".hex()}
    lines[place + 1 : place + 1] = [prompt, *hello, asked]
    with Tracer.open(f"replay:{with_lines(file, 'prompt.jsonl', lines)}") as tracer:
        again = tracer.sweep()
        assert tracer.frames.counters.rescues == 1
    assert same(trace, again)


def test_what_was_not_recorded_is_silence_and_the_message_says_so(bench, file):
    with recording_tracer(bench("in-process"), file) as tracer:
        tracer.status()
    started = time.monotonic()
    with pytest.raises(LinkError) as caught:
        replayed(file)
    assert time.monotonic() - started < 5.0
    four_parts(caught.value, "for arm", "no answer in 6 s", "a reply", "check that")


def test_knots_that_never_agree_with_their_crc_end(bench, file, monkeypatch):
    """A device with a damaged memory would hold the host for ever."""
    with recording_tracer(bench("in-process"), file) as tracer:
        tracer.sweep()
    monkeypatch.setattr(Reassembly, "crc_ok", lambda reassembly: False)
    with Tracer.open(f"replay:{file}") as tracer:
        manifest = tracer._session.request("read_manifest")
        with pytest.raises(LinkError) as caught:
            sweep_module.fetch(tracer._session, manifest)
    assert caught.value.expected == "all knots, with the CRC of the manifest"


def test_a_recording_that_ends_before_its_sweep_makes_up_no_state(bench, file):
    """What held before the fire says nothing of what holds after it."""
    with recording_tracer(bench("in-process"), file) as tracer:
        tracer.sweep()
    lines = lines_of(file)
    fired = next(i for i, line in enumerate(lines) if line.get("t", 0.0) > 1.0)
    with pytest.raises(LinkError) as caught:
        replayed(with_lines(file, "short.jsonl", lines[:fired]))
    four_parts(caught.value, "for status", "no answer in 6 s", "a reply", "check that")


# -- the file ----------------------------------------------------------------------------------


class FullDisk:
    """A file on a disk that has room for so many lines, and then for half a line."""

    def __init__(self, file, lines):
        self._file = file
        self._lines = lines

    def write(self, line):
        self._lines -= 1
        if self._lines == 0:
            return self._file.write(line[: len(line) // 2])
        if self._lines < 0:
            raise OSError(28, "No space left on device")
        return self._file.write(line)

    def close(self):
        self._file.close()
        raise OSError(5, "Input/output error")


@pytest.mark.parametrize("room", [0, 1, 9])
def test_a_full_disk_ends_the_recording_and_not_the_sweep(room, bench, file, monkeypatch, caplog):
    one = bench("in-process")
    plain = bench("in-process").tracer().sweep()
    path = type(file)
    open_file = path.open

    def full(self, *args, **words):
        opened = open_file(self, *args, **words)
        return FullDisk(opened, room) if self == file else opened

    monkeypatch.setattr(path, "open", full)
    with caplog.at_level("WARNING", "kneewise.link.recording"):
        tracer = recording_tracer(one, file)
        trace = tracer.sweep()
        tracer.close()
    monkeypatch.undo()
    assert same(plain, trace)
    warnings = [record.getMessage() for record in caplog.records if "recording" in record.name]
    assert len(warnings) == 1
    assert "has stopped" in warnings[0]
    said = tracer.recorder.outcome()
    assert said.startswith(f"The recording {file} stopped early (")
    assert said.endswith("it is not whole.")
    if room > 1:
        recording = read_recording(file)
        assert recording.cut_short
        assert len(recording.chunks) == room - 2


def test_a_recording_is_never_overwritten(bench, file):
    file.write_text("of value", encoding="utf-8")
    with pytest.raises(UsageError) as caught:
        recording_tracer(bench("in-process"), file)
    four_parts(caught.value, "recording to", "a file of that name", "a new file", "another name")
    assert file.read_text(encoding="utf-8") == "of value"


def test_a_recording_that_cannot_be_made_is_told_before_anything_is_done(bench, file):
    one = bench("in-process")
    with pytest.raises(UsageError) as caught:
        recording_tracer(one, file / "no" / "folder")
    four_parts(caught.value, "recording to", "No such file", "can be made", "another folder")
    assert one.tracer().status().state == "safe"


def test_each_line_is_in_the_file_at_once(bench, file):
    """A host that is killed in mid-session leaves what it had recorded."""
    tracer = recording_tracer(bench("in-process"), file)
    tracer.status()
    before = len(lines_of(file))
    tracer.status()
    assert len(lines_of(file)) == before + 2
    tracer.close()
    tracer.close()
    assert lines_of(file)[0]["target"] == "a bench"


def test_a_replay_of_another_protocol_is_refused(bench, file):
    with recording_tracer(bench("in-process"), file) as tracer:
        tracer.status()
    lines = lines_of(file)
    lines[0]["protocol"] = "7.2"
    with pytest.raises(UsageError) as caught:
        replayed(with_lines(file, "other.jsonl", lines))
    four_parts(caught.value, "replaying", "protocol 7.2", "this host speaks", "the version")


@pytest.mark.parametrize("target", ["replay", "replay:"])
def test_a_replay_of_nothing(target):
    with pytest.raises(UsageError) as caught:
        Tracer.open(target)
    four_parts(caught.value, f"opening {target}", "no file", "replay:FILE", "--record FILE")


def test_a_replay_can_be_recorded_and_replayed_again(bench, file):
    with recording_tracer(bench("in-process"), file) as tracer:
        trace = tracer.sweep()
    second = file.with_name("second.jsonl")
    with Tracer.open(f"replay:{file}", record=second) as tracer:
        tracer.sweep()
    assert same(trace, replayed(second))
