"""`kneewise wire`: a user who wonders what went over the link gets to read it."""

from __future__ import annotations

import json
import sys
from pathlib import Path

import pytest
from typer.testing import CliRunner, Result

from kneewise import Tracer
from kneewise.cli import main as command
from kneewise.cli import wire as wire_module
from kneewise.errors import KneewiseError


@pytest.fixture(scope="module")
def recording(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A sweep on the emulator, with damage and text put in after the first answer."""
    path = tmp_path_factory.mktemp("recording") / "session.jsonl"
    with Tracer.open("emulator:in-process", record=path) as tracer:
        tracer.sweep(knots=32)
    lines = path.read_text(encoding="utf-8").splitlines()
    at_s = json.loads(lines[2])["t"]
    for data in (b"\r\nTraceback:\r\n  MemoryError\r\n\0", b"\x09\x09\xff\0"):
        lines.insert(3, json.dumps({"t": at_s, "to": "host", "hex": data.hex()}))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


def run(*words: object) -> Result:
    done = CliRunner().invoke(command.app, [str(word) for word in words])
    if done.exception is not None and not isinstance(done.exception, SystemExit):
        raise done.exception
    return done


def failed(*words: object) -> KneewiseError:
    with pytest.raises(KneewiseError) as caught:
        run(*words)
    return caught.value


def test_a_recording_as_a_table(recording: Path) -> None:
    lines = run("wire", recording).stdout.splitlines()
    assert lines[0].startswith(f"EMULATED, REPLAYED: {recording}, recorded 20")
    assert lines[0].endswith("UTC from emulator:in-process")
    assert lines[1].split() == [
        *("time", "s", "way", "message", "session", "sequence", "bytes", "fields")
    ]
    hello, answer = lines[2].split(), lines[3].split()
    assert hello[0] == "0.000000"
    assert (hello[1:5], answer[1:4]) == (
        ["to", "device", "hello", "ffffffff"],
        ["to", "host", "hello_reply"],
    )
    assert "reset_cause power on" in lines[3]
    assert lines[4].split()[1:] == ["to", "host", "3", "bad", "frame:", "cobs"]
    assert lines[5].endswith("text: Traceback: | MemoryError")
    assert any("state safe, contact_closed 0, bleed_engaged 1" in line for line in lines)
    assert any("end_reason complete, knots 32" in line for line in lines)
    # Columns stand under their names.
    place = lines[1].index("fields")
    assert all(line[place - 1 : place] in (" ", "") for line in lines[1:])


def test_a_recording_as_json(recording: Path) -> None:
    done = run("wire", recording, "--json")
    rows = [json.loads(line) for line in done.stdout.splitlines()]
    assert {row["label"] for row in rows} == {"EMULATED, REPLAYED"}
    assert [row["message"] for row in rows[:2]] == ["hello", "hello_reply"]
    assert int(rows[1]["fields"]["boot_nonce"], 16) > 0
    assert rows[2]["remark"] == "bad frame: cobs"
    assert rows[3]["remark"] == "text: Traceback:\r\n  MemoryError"
    for row in rows:
        assert row["way"] in ("to device", "to host")
        assert row["time_s"] >= 0.0
        assert row["bytes"] > 0
    assert [row["time_s"] for row in rows] == sorted(row["time_s"] for row in rows)
    manifest = next(row for row in rows if row["message"] == "manifest")
    assert manifest["fields"]["knots"] == 32
    # What a person is told does not stand in the way of a program.
    assert done.stderr.startswith(f"EMULATED, REPLAYED: {recording}")


def test_bytes_are_those_that_went_over_the_link(recording: Path) -> None:
    rows = [json.loads(line) for line in run("wire", recording, "--json").stdout.splitlines()]
    lines = [json.loads(line) for line in recording.read_text(encoding="utf-8").splitlines()]
    for way in ("device", "host"):
        coded = sum(len(bytes.fromhex(line["hex"])) for line in lines if line.get("to") == way)
        shown = sum(row["bytes"] for row in rows if row["way"] == f"to {way}")
        # The delimiter of what is no frame counts for nothing.
        assert coded - shown == (0 if way == "device" else 2)


def test_a_terminal_cuts_long_lines(recording: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Lines that wrap make a table unreadable."""
    monkeypatch.setattr(wire_module, "_width", lambda: 80)
    lines = run("wire", recording).stdout.splitlines()[1:]
    assert max(len(line) for line in lines) == 80
    assert sum(line.endswith("...") for line in lines) > 3
    whole = run("wire", recording, "--json").stdout.splitlines()
    assert json.loads(whole[1])["fields"]["ticks_per_s"] == 1000000


def test_live(monkeypatch: pytest.MonkeyPatch) -> None:
    def never(tracer: Tracer) -> None:
        raise AssertionError("`wire` looks on")

    for name in ("sweep", "rest", "clear_fault", "held"):
        monkeypatch.setattr(Tracer, name, never)
    lines = run("wire", "--on", "emulator:in-process", "--seconds", 3).stdout.splitlines()
    assert lines[0] == "EMULATED: live"
    rows = [line.split() for line in lines[2:-1]]
    names = [row[3] for row in rows]
    assert names[:4] == ["hello", "hello_reply", "read_profile", "profile"]
    assert names[4:] == ["status", "status_reply"] * 3
    times = [float(row[0]) for row in rows]
    assert times[0] == 0.0
    assert times == sorted(times)
    asked = times[4::2]
    assert asked[1] - asked[0] == pytest.approx(1.0, abs=0.01)
    assert lines[-1] == "5 sent, 5 received"


def test_live_as_json() -> None:
    done = run("wire", "--on", "emulator:in-process", "--seconds", 1, "--json")
    rows = [json.loads(line) for line in done.stdout.splitlines()]
    assert len(rows) == 6
    assert rows[-1]["fields"]["state"] == "safe"
    assert {row["label"] for row in rows} == {"EMULATED"}
    assert done.stderr.splitlines() == ["EMULATED: live", "3 sent, 3 received"]


def test_live_ended_by_hand(monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupted(tracer: Tracer, seconds: float) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(Tracer, "listen", interrupted)
    done = run("wire", "--on", "emulator:in-process")
    assert done.exit_code == 0
    assert done.stdout.splitlines()[-1] == "3 sent, 3 received"


def test_live_on_a_replay(recording: Path) -> None:
    done = run("wire", "--on", f"replay:{recording}", "--seconds", 2)
    assert done.stdout.startswith("EMULATED, REPLAYED: live\n")
    assert done.stderr.startswith(f"REPLAYED from {recording}, recorded 20")
    assert done.stderr.endswith("UTC from emulator:in-process; nothing is measured now\n")
    assert "bad frame: cobs" in done.stdout


def test_a_recording_and_a_tracer_are_one_too_many(recording: Path) -> None:
    error = failed("wire", recording, "--on", "emulator")
    assert error.exit_code == 2
    assert error.what == "showing frames"
    assert error.found == f"a recording ({recording}) and a tracer (emulator)"
    assert error.expected == "one of them"
    assert error.next_step == ("leave out the file to look on live, or --on to read the recording")


def test_a_file_that_is_not_there_becomes_a_message(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "absent.jsonl"
    monkeypatch.setattr(sys, "argv", ["kneewise", "wire", str(path)])
    with pytest.raises(SystemExit) as caught:
        command.main()
    assert caught.value.code == 2
    assert capsys.readouterr().err.splitlines() == [
        f"Not done: reading the recording {path}",
        "  found     No such file or directory",
        "  expected  a file that can be read",
        "  next      check the path; `--record FILE` makes a recording, --on names a tracer",
    ]


def test_a_recording_that_is_cut_short_is_shown_and_told(recording: Path, tmp_path: Path) -> None:
    short = tmp_path / "short.jsonl"
    short.write_bytes(recording.read_bytes()[:-9])
    lines = run("wire", short).stdout.splitlines()
    assert lines[0].endswith("; its last line is cut short and left out")
    assert len(lines) == len(run("wire", recording).stdout.splitlines()) - 1


def test_help_shows_an_example() -> None:
    assert "Example: kneewise wire session.jsonl" in run("wire", "--help").stdout


def test_a_sweep_and_a_rest_record_and_replay(tmp_path: Path) -> None:
    """The two commands of the README."""
    session, store = tmp_path / "session.jsonl", tmp_path / "traces"
    done = run(
        *("sweep", "--on", "emulator:in-process", "--knots", 32, "--store", store),
        *("--record", session, "--json"),
    )
    first = json.loads(done.stdout)
    assert done.stderr.splitlines()[-1] == f"Recorded in {session}"
    done = run("sweep", "--on", f"replay:{session}", "--store", store, "--json")
    again = json.loads(done.stdout)
    assert (again["label"], again["rung"]) == ("EMULATED, REPLAYED", "replay")
    assert again["figures"] == first["figures"]
    assert again["voltage"] == first["voltage"]
    assert again["trace_id"] != first["trace_id"]
    assert again["file"].endswith("-EMULATED-REPLAYED.parquet")
    assert Path(again["picture"]).exists()
    assert "nothing is measured now" in done.stderr
    assert "Caution" not in done.stderr

    resting = tmp_path / "resting.jsonl"
    done = run("rest", "--on", "emulator:in-process", "--record", resting)
    assert done.stderr == f"Recorded in {resting}\n"
    done = run("rest", "--on", f"replay:{resting}")
    assert done.stdout.startswith("EMULATED, REPLAYED: safe\n")
    done = run("rest", "--on", f"replay:{resting}", "--json")
    assert json.loads(done.stdout)["label"] == "EMULATED, REPLAYED"


def test_a_recording_is_not_recorded_over(tmp_path: Path) -> None:
    session = tmp_path / "session.jsonl"
    session.write_text("of value", encoding="utf-8")
    error = failed("rest", "--on", "emulator:in-process", "--record", session)
    assert error.what == f"recording to {session}"
    assert error.found == "a file of that name"
    assert error.expected == "a new file: a recording is never overwritten"
    assert error.next_step == "choose another name, or take that file away"
    assert session.read_text(encoding="utf-8") == "of value"
