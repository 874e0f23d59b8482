"""The command line as a technician and a script meet it: what it prints, stores and returns."""

import json
import os
import pty
import select
import subprocess
import sys
import threading
import tty
from contextlib import contextmanager
from pathlib import Path

import pytest
import serial
from rig import needs_micropython

from kneewire import catalogue, framing
from kneewire.messages import HEADER_BYTES, pack, unpack
from kneewise.archive.store import load
from kneewise.emulator.converters import Scaling
from kneewise.emulator.opener import DEVICE_ID, profile_for, scaling_of
from kneewise.emulator.process import ProcessTracer
from kneewise.emulator.scenario import Scenario, example_text

KNEEWISE = [sys.executable, "-m", "kneewise.cli.main"]


def run(*words, folder, timeout=60):
    return subprocess.run(
        [*KNEEWISE, *map(str, words)],
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=timeout,
        check=False,
    )


def assert_message(done, code, *parts):
    """One clear message with a next step, the right exit code, no traceback."""
    assert done.returncode == code, done.stderr
    assert "Traceback" not in done.stderr
    assert done.stdout == ""
    lines = done.stderr.strip().splitlines()
    assert [line.split()[0] for line in lines[-4:]] == ["Not", "found", "expected", "next"]
    for part in parts:
        assert part in done.stderr


def test_a_sweep_for_people(tmp_path, rung):
    done = run("sweep", "--on", f"emulator:{rung}", folder=tmp_path)
    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("EMULATED: sweep ")
    for word in ("Isc", "Voc", "Pmp", "Vmp", "Imp", "fill factor", "knots", "pairs", "capacitor"):
        assert word in done.stdout
    assert ("MicroPython" if rung == "micropython" else "in-process") in done.stdout
    assert "FAILED" not in done.stdout
    stored = list((tmp_path / "traces").glob("*-EMULATED.parquet"))
    pictures = list((tmp_path / "traces").glob("*-EMULATED.png"))
    assert len(stored) == len(pictures) == 1
    assert pictures[0].read_bytes().startswith(b"\x89PNG")
    assert load(stored[0]).label == "EMULATED"


def test_a_sweep_for_scripts(tmp_path):
    done = run("sweep", "--on", "emulator", "--json", "--knots", 64, folder=tmp_path)
    assert done.returncode == 0, done.stderr
    data = json.loads(done.stdout)
    for name in ("voltage", "current", "time", "weight"):
        assert len(data[name]) == 64
    for name in ("isc", "voc", "imp", "vmp", "pmp", "ff"):
        assert data["figures"][name] == pytest.approx(data["truth"][name], rel=0.005)
    assert data["integrity"]["knots"] == 64
    assert data["integrity"]["pairs"] == sum(data["weight"])
    assert data["integrity"] == {
        **data["integrity"],
        "frames_bad": 0,
        "blocks_resent": 0,
        "ring_overruns": 0,
        "manifest_crc_ok": True,
    }
    assert data["residual_capacitor_v"] < 12.0
    assert data["label"] == "EMULATED"
    trace = load(tmp_path / data["file"])
    assert trace.trace_id == data["trace_id"]
    assert trace.voltage.tolist() == data["voltage"]


def test_pairs_kept_one_by_one(tmp_path):
    done = run("sweep", "--on", "emulator", "--full-rate", "6.5:8", "--json", folder=tmp_path)
    assert done.returncode == 0, done.stderr
    data = json.loads(done.stdout)
    kept = data["full_rate"]
    assert (kept["pairs"], kept["asked"], kept["first"]) == (2000, 2000, 1625)
    assert (kept["from_s"], kept["to_s"]) == pytest.approx((0.0065, 0.0145))
    assert data["scout"] is None
    assert data["zeros"] == pytest.approx({"voltage_code": 24.0, "current_code": 40.0}, abs=0.5)
    assert data["integrity"]["bounces"] == 0
    assert len(load(tmp_path / data["file"]).full_rate) == 2000


def test_pairs_about_the_knee(tmp_path, rung):
    words = ("sweep", "--on", f"emulator:{rung}", "--full-rate", "knee:4")
    done = run(*words, folder=tmp_path)
    assert done.returncode == 0, done.stderr
    assert "1000 raw pairs, " in done.stdout
    assert "  steered by scout sweep " in done.stdout
    assert "32 knots in " in done.stdout
    assert "holds   agrees with the scout sweep: Isc " in done.stdout
    assert "  zeros: voltage 24." in done.stdout
    assert "scout: charging" in done.stderr
    # One file: the scout is in it.
    (stored,) = (tmp_path / "traces").glob("*.parquet")
    assert load(stored).scout is not None


def test_a_scout_for_scripts(tmp_path):
    done = run("sweep", "--on", "emulator", "--scout", "--json", folder=tmp_path)
    data = json.loads(done.stdout)
    scout = data["scout"]
    assert scout["knots"] == 32
    assert scout["figures"]["pmp"] == pytest.approx(data["figures"]["pmp"], rel=0.01)
    assert data["full_rate"]["from_s"] < scout["maximum_s"] < data["full_rate"]["to_s"]


@pytest.mark.parametrize(
    ("stretch", "parts"),
    [
        ("6.5", ("reading --full-rate", "START:DURATION in ms", "--full-rate knee")),
        ("knee:long", ("reading --full-rate", "knee:DURATION")),
        ("0:30", ("30 ms, 7500 pairs", "0.004 to 8.192 ms", "ask for a shorter stretch")),
        ("20000:1", ("from 20000 ms on", "longest closed time, 10000 ms")),
    ],
)
def test_a_stretch_that_cannot_be(stretch, parts, tmp_path):
    done = run("sweep", "--on", "emulator", "--full-rate", stretch, folder=tmp_path)
    assert_message(done, 2, *parts)
    assert not (tmp_path / "traces").exists()


def test_a_bad_scout_is_stored_and_the_sweep_not_made(tmp_path):
    words = ("sweep", "--on", "emulator", "--scout", "--limit", "0.01")
    done = run(*words, folder=tmp_path)
    assert_message(
        done, 5, "scout sweep ", "ended by itself: time limit", "What was swept is stored"
    )
    (stored,) = (tmp_path / "traces").glob("*.parquet")
    assert not load(stored).sound


def test_a_scenario_of_ones_own(tmp_path):
    text = example_text().replace("photocurrent_a = 9.2", "photocurrent_a = 4.6")
    (tmp_path / "mine.toml").write_text(text, encoding="utf-8")
    done = run("sweep", "--on", "emulator:mine.toml", "--json", folder=tmp_path)
    assert json.loads(done.stdout)["figures"]["isc"] == pytest.approx(4.6, rel=0.01)


def test_the_example_scenario_is_a_scenario(tmp_path):
    done = run("emulate", "--example", folder=tmp_path)
    assert done.stdout == example_text()
    assert done.stdout.count("#") > 10
    (tmp_path / "example.toml").write_text(done.stdout, encoding="utf-8")
    assert Scenario.load(tmp_path / "example.toml") == Scenario.default()


@contextmanager
def served(folder):
    """`kneewise emulate` in a process of its own; the name of its port."""
    words = [*KNEEWISE, "emulate", "--json"]
    with subprocess.Popen(words, cwd=folder, stdout=subprocess.PIPE, text=True) as process:
        try:
            yield json.loads(process.stdout.readline())["port"]
        finally:
            process.terminate()
            assert process.wait(10) == 0


@needs_micropython
def test_an_emulated_tracer_served_on_a_pty(tmp_path):
    """The very same path as a real port, and the picture still says EMULATED."""
    with served(tmp_path) as port:
        done = run("sweep", "--on", os.path.realpath(port), "--json", folder=tmp_path)
        assert done.returncode == 0, done.stderr
        data = json.loads(done.stdout)
        assert (data["label"], data["rung"], data["truth"]) == ("EMULATED", "emulator", None)
        again = run("rest", "--on", port, folder=tmp_path)
        assert again.stdout.startswith("EMULATED: safe")
    assert not os.path.lexists(port)


@needs_micropython
def test_a_busy_port(tmp_path):
    with served(tmp_path) as port:
        with serial.Serial(port, exclusive=True):
            done = run("sweep", "--on", port, folder=tmp_path)
        assert_message(done, 4, "in use by another program", "close that program")


def test_an_absent_port(tmp_path):
    done = run("sweep", "--on", tmp_path / "no-such-port", folder=tmp_path)
    assert_message(done, 4, "no such port", "plug the tracer in")


def test_nothing_plugged_in_and_nothing_named(tmp_path, monkeypatch):
    done = run("sweep", folder=tmp_path)
    if "boards plugged in" in done.stderr:
        pytest.skip("several boards are plugged into this machine")
    assert_message(done, 4, "no tracer plugged in", "--on emulator")


@pytest.mark.parametrize("target", ["emulator:nonsense", "tcp:here", "nonsense://x"])
def test_an_unknown_target(target, tmp_path):
    done = run("sweep", "--on", target, folder=tmp_path)
    assert_message(done, 2, f"opening {target}")


@pytest.mark.parametrize(
    ("text", "part"),
    [
        (None, "mine.toml"),
        ("title = = 1\n", "line 1"),
        (example_text().replace("photocurrent_a", "photocurent_a", 1), "photocurent_a"),
        (example_text().replace("seed = 1", 'seed = "one"'), "seed"),
        (example_text().replace("= 2200e-6", "= -1.0"), "capacitance_f"),
    ],
)
def test_a_scenario_that_cannot_be(text, part, tmp_path):
    if text is not None:
        (tmp_path / "mine.toml").write_text(text, encoding="utf-8")
    done = run("sweep", "--on", "emulator:mine.toml", folder=tmp_path)
    assert_message(done, 2, part)


@needs_micropython
def test_a_prompt_instead_of_firmware(tmp_path):
    """A board without firmware shows MicroPython's prompt; the user must be told just that."""
    bare = "import sys\nsys.path[:] = []\n"
    tracer = ProcessTracer(Scenario.default(), Scaling(), b"", b"KNEEWISE", program=bare)
    try:
        done = run("sweep", "--on", tracer.port_name, folder=tmp_path)
        assert_message(done, 1, "a MicroPython prompt", "the Kneewise firmware", "reset the board")
    finally:
        tracer.close()


@needs_micropython
@pytest.mark.clause("R2", "R3")
def test_a_firmware_left_at_the_prompt_is_started_from_there(tmp_path):
    program = "print('main.py did not get far')\n"
    profile = profile_for(Scenario.default())
    record = profile.record(DEVICE_ID)
    values = (Scenario.default(), scaling_of(profile), record, DEVICE_ID)
    tracer = ProcessTracer(*values, program=program)
    try:
        done = run("sweep", "--on", tracer.port_name, "--json", folder=tmp_path)
        assert done.returncode == 0, done.stderr
    finally:
        tracer.close()


@needs_micropython
@pytest.mark.clause("R2")
def test_a_firmware_that_crashes_at_start(tmp_path):
    program = "import sys\nsys.path[:] = []\nraise OSError('flash is worn')\n"
    tracer = ProcessTracer(Scenario.default(), Scaling(), b"", b"KNEEWISE", program=program)
    try:
        done = run("sweep", "--on", tracer.port_name, folder=tmp_path)
        assert_message(done, 1, "OSError: flash is worn", "the Kneewise firmware")
    finally:
        tracer.close()


class OtherVersion:
    """A device of another protocol version: answers hello, which is frozen, and nothing else."""

    def __init__(self, changes):
        self._changes = changes
        self._master, slave = pty.openpty()
        tty.setraw(slave)
        self.port = os.ttyname(slave)
        self._slave = slave
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._serve, daemon=True)
        self._thread.start()

    def _serve(self):
        decoder = framing.Decoder(1024, toward_device=True)
        values = {name: 0 for name, _ in catalogue.MESSAGES[catalogue.KINDS["hello_reply"]][4]}
        values.update(device_id=bytes(8), **self._changes)
        while not self._stop.is_set():
            if not select.select([self._master], [], [], 0.05)[0]:
                continue
            for item in decoder.feed(os.read(self._master, 4096)):
                if isinstance(item, bytes) and len(item) >= HEADER_BYTES:
                    request = unpack(item)
                    body = pack("hello_reply", 7, request.sequence, values)
                    os.write(self._master, framing.encode(body, toward_device=False))

    def close(self):
        self._stop.set()
        self._thread.join()
        os.close(self._master)
        os.close(self._slave)


@pytest.mark.skipif(os.name != "posix", reason="a pty is needed to play another device")
@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"major": 1, "minor": 4, "firmware_major": 3}, "protocol 1.4"),
        ({"major": 0, "minor": 1, "fingerprint": 0x12345678}, "catalogue 12345678"),
    ],
)
def test_a_device_of_another_protocol_version(changes, said, tmp_path):
    device = OtherVersion(changes)
    try:
        done = run("sweep", "--on", device.port, folder=tmp_path)
        assert_message(done, 1, "the device has " if "major" in changes else "", said)
        assert "the host has protocol" in done.stderr
        assert "store the firmware that came with this host" in done.stderr
    finally:
        device.close()


def scenario_file(folder: Path, **changes):
    """The example with some [board] keys changed."""
    text = example_text()
    for key, value in changes.items():
        lines = [
            f"{key} = {value}" if line.startswith(f"{key} ") else line for line in text.splitlines()
        ]
        text = "\n".join(lines) + "\n"
    path = folder / "changed.toml"
    path.write_text(text, encoding="utf-8")
    return path


@pytest.mark.parametrize(
    ("changes", "code", "parts"),
    [
        ({"leads_reversed": "true"}, 3, ("H5 leads reversed", "swap the leads")),
        ({"stop_loop_open": "true"}, 3, ("H12", "close the lid")),
        ({"saturation_current_a": "1e-16"}, 3, ("H4", "rated voltage", "at most 60.000 V")),
        ({"capacitor_start_v": "30.0", "bleed_open": "true"}, 3, ("H", "capacitor")),
    ],
)
def test_a_refusal_names_its_guard(changes, code, parts, tmp_path, rung):
    """Whoever is refused must learn by which guard, what was measured, and what to do."""
    path = scenario_file(tmp_path, **changes)
    done = run("sweep", "--on", f"emulator:{rung}:{path.name}", folder=tmp_path)
    assert_message(done, code, *parts)


def test_a_dark_source_is_not_a_curve(tmp_path, rung):
    path = scenario_file(tmp_path, photocurrent_a="0.0")
    done = run("sweep", "--on", f"emulator:{rung}:{path.name}", folder=tmp_path)
    assert_message(done, 5, "no current", "lit and connected")


def test_help_of_each_verb_shows_an_example(tmp_path):
    for verb in ("sweep", "emulate", "rest"):
        done = run(verb, "--help", folder=tmp_path)
        assert done.returncode == 0
        assert f"Example: kneewise {verb}" in done.stdout


def test_wrong_usage(tmp_path):
    done = run("sweep", "--knots", "7", "--on", "emulator", folder=tmp_path)
    assert done.returncode == 2
    assert "Traceback" not in done.stderr
