"""The checkers of `protocol/conformance`, held against both sides and against wrong ones.

A third party will trust their tables. So the firmware and the host pass every clause, and each
wrong device and host, wrong in one way, fails just the clauses that it breaks.
"""

from __future__ import annotations

import contextlib
import json
import re
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
import wrong_pairs  # noqa: F401  # joins the wrong devices
from wrong_devices import WRONG_DEVICES, SlowPort
from wrong_hosts import WRONG_HOSTS

from conformance import clauses, device_frames, device_run, host_rules, host_run, host_scripts
from conformance.host_model import raw_pairs
from conformance.report import (
    FAILED,
    NOT_TRIED,
    PASSED,
    UNSEEN,
    Result,
    failed,
    lines,
    table,
)
from conformance.wire import Port
from kneewire import PROTOCOL, catalogue, framing
from kneewise.emulator import inprocess, process
from kneewise.emulator.firmware import firmware_module
from kneewise.emulator.opener import connector, start
from kneewise.emulator.scenario import Scenario
from kneewise.errors import (
    KneewiseError,
    LinkError,
    OutcomeUnknownError,
    ProtocolError,
    RefusedError,
)
from kneewise.instrument.full_rate import FullRate
from kneewise.instrument.tracer import Opened, Tracer

PACKAGE = Path(device_run.__file__).parent
SPEC = PACKAGE.parent / "SPEC.md"
LONG = {"source": {"irradiance_w_m2": 8.0}}  # a charge that outlasts a lost host
# What does not show on a sweep of 50 ms over a link that is always read.
SHORT_UNSEEN = {"F9", "W7", "W13"}

Patch = pytest.MonkeyPatch


def outcomes(sides: dict[str, str], results: list[Result], outcome: str) -> set[str]:
    return {line.clause for line in lines(sides, results) if line.outcome == outcome}


def told(sides: dict[str, str], results: list[Result]) -> str:
    """The failures, for the one who reads why a test has failed."""
    found = [result for line in lines(sides, results) for result in line.failures]
    return "\n".join(f"{result.clauses} {result.check}: {result.found}" for result in found)


def unseen(sides: dict[str, str]) -> set[str]:
    """The clauses that never show."""
    return {name for name, why in sides.items() if why not in (clauses.CHECKED, clauses.OTHER)}


# -- devices ---------------------------------------------------------------------------------


class Cable:
    """The in-process port; what ends it is an OSError, as on a serial port."""

    def __init__(self, port: Any) -> None:
        self.name = port.name
        self.clock, self.sleep, self.close = port.clock, port.sleep, port.close
        self.written: list[bytes] = []
        self._port = port

    def read(self, timeout_s: float) -> bytes:
        try:
            return self._port.read(timeout_s)
        except LinkError as error:
            raise OSError(str(error)) from error

    def write(self, data: bytes) -> None:
        self.written.append(data)
        self._port.write(data)


@pytest.fixture
def emulated() -> Iterator[Callable[..., Any]]:
    made = []

    def make(**changes: Any) -> Any:
        scenario = Scenario.default().varied(**changes) if changes else Scenario.default()
        made.append(start(scenario, "in-process"))
        return made[-1]

    yield make
    for one in made:
        one.close()


def checked(tracer: Any, **options: bool) -> list[Result]:
    port: Port = Cable(connector(tracer)())
    return device_run.check_device(port, **options)


@pytest.mark.clause("F1", "F2", "F3", "F4", "F5", "F6", "F7", "F8", "B1", "B2", "B3", "B4", "B5")
@pytest.mark.clause("B7", "H1", "H2", "H3", "H4", "S1", "S2", "S3", "S4", "S5", "W1", "W2", "W3")
@pytest.mark.clause("W4", "W5", "W6", "W7", "W8", "W9", "W10", "W11", "W13", "A1", "A2", "A3")
@pytest.mark.clause("R3", "R4", "R5", "C3", "T1", "T2", "K1", "K2", "K3", "K4", "K5", "K6", "K7")
def test_the_firmware_passes_every_clause(emulated: Any) -> None:
    results = checked(emulated(**LONG))
    assert failed(results) == set(), told(clauses.DEVICE, results)
    assert outcomes(clauses.DEVICE, results, NOT_TRIED) == set()
    assert outcomes(clauses.DEVICE, results, UNSEEN) == {"F9"} | unseen(clauses.DEVICE)


@pytest.mark.clause("F9")
def test_the_firmware_ends_a_frame_that_was_cut(emulated: Any, monkeypatch: Patch) -> None:
    monkeypatch.setattr(inprocess, "_Link", SlowPort)
    results = checked(emulated())
    assert failed(results) == set(), told(clauses.DEVICE, results)
    assert "F9" in outcomes(clauses.DEVICE, results, PASSED)


@pytest.mark.skipif(not process.available(), reason="no MicroPython for this platform")
@pytest.mark.clause("F4", "F6", "S2", "W4", "W9", "W10", "W11", "R3", "R4", "R5")
def test_the_firmware_in_micropython_passes_from_a_checkout() -> None:
    """As a third party runs it: a port by its name, one object a check, an exit code."""
    tracer = start(Scenario.default(), "micropython")
    try:
        words = [sys.executable, str(PACKAGE), "device", tracer.port_name, "--json"]
        done = subprocess.run(words, capture_output=True, text=True, timeout=60, check=False)
    finally:
        tracer.close()
    rows = [json.loads(line) for line in done.stdout.splitlines()]
    assert [row for row in rows if row["outcome"] == FAILED] == []
    assert done.returncode == 0, done.stderr
    assert len(rows) == len(device_run.CHECKS)
    results = [Result(**{**row, "clauses": tuple(row["clauses"])}) for row in rows]
    never = SHORT_UNSEEN | unseen(clauses.DEVICE)
    assert outcomes(clauses.DEVICE, results, UNSEEN) == never


def test_a_real_device_closes_nothing_unless_it_is_allowed(
    emulated: Any, monkeypatch: Patch
) -> None:
    """A checker that fires by itself would be a danger on a bench."""
    board_file = firmware_module("hal_emulated").EmulatedHal
    monkeypatch.setattr(board_file, "EMULATED", False)
    tracer = emulated()
    results = checked(tracer)
    assert failed(results) == set(), told(clauses.DEVICE, results)
    assert {"W2", "W4", "W11", "A3"} <= outcomes(clauses.DEVICE, results, NOT_TRIED)
    assert not [entry for entry in tracer.board.record if entry[1:] == ("relay", 1)]
    allowed = checked(tracer, allow_sweep=True)
    assert outcomes(clauses.DEVICE, allowed, NOT_TRIED) == set()


def test_whatever_happens_the_last_frame_is_an_abort(emulated: Any) -> None:
    port = Cable(connector(emulated())())
    reads = iter(range(300))

    def read(timeout_s: float, read: Any = port.read) -> Any:
        if next(reads, None) is None:
            raise OSError("pulled out")
        return read(timeout_s)

    port.read = read  # type: ignore[method-assign]
    with pytest.raises(OSError, match="pulled out"):
        device_run.check_device(port)
    last = framing.decode_run(port.written[-1].split(b"\0")[-2], True)
    assert isinstance(last, bytes)
    assert last[0] == catalogue.KINDS["abort"]


def test_a_sweep_of_somebody_else_is_left_alone(emulated: Any) -> None:
    tracer = emulated()
    opened = Opened(connect=connector(tracer), close=lambda: None, rung="in-process")
    with Tracer(opened) as host, contextlib.suppress(RuntimeError):

        def keep(trace: object) -> None:
            raise RuntimeError("not stored")

        host.sweep(knots=16, keep=keep)
    with pytest.raises(device_run.Stop, match="holds a sweep"):
        checked(tracer)
    assert tracer.firmware.held.present()


@pytest.mark.parametrize(
    ("broken", "wrong"), WRONG_DEVICES, ids=[wrong.__name__ for _, wrong in WRONG_DEVICES]
)
def test_a_wrong_device_fails_the_clauses_that_it_breaks(
    broken: set[str], wrong: Any, emulated: Any, monkeypatch: Patch
) -> None:
    wrong(monkeypatch)
    results = checked(emulated())
    assert failed(results) == broken, told(clauses.DEVICE, results)


# -- hosts -------------------------------------------------------------------------------------

# What a user of Kneewise sees in each script: "" for a sound curve, else words of the exception.
SEEN = {
    "fire refused": (RefusedError, "H12 .*stop loop"),
    "reset behind the fire": (OutcomeUnknownError, "reset after it was told to fire.*watchdog"),
    "session forgotten behind the fire": (OutcomeUnknownError, "holds no such sweep"),
    "another catalogue": (ProtocolError, "the device has .*the host has .*firmware"),
    "another major version": (ProtocolError, rf"the device has protocol 1\.{PROTOCOL[1]}"),
    "silence": (LinkError, "no answer in 3 s"),
}


# More raw pairs than one burst holds.
STRETCH = FullRate(start_s=0.001, duration_s=0.006)
STRETCH_PAIRS = (250, 1500)


def swept(play: host_run.Play, knots: int = 96) -> Any:
    """One sweep of Kneewise, raw pairs with it, with the scripted device of a play."""
    opened = Opened(
        connect=lambda: host_run.Loopback(play.device), close=lambda: None, rung="tracer"
    )
    with Tracer(opened) as tracer:
        return tracer.sweep(knots=knots, full_rate=STRETCH)


def played(knots: int = 96) -> list[Result]:
    """All scripts, whatever comes of them at the host."""
    plays = [host_run.Play(script) for script in host_scripts.SCRIPTS]
    for play in plays:
        with contextlib.suppress(KneewiseError):
            swept(play, knots)
    return host_run.results(plays)


@pytest.mark.clause("B2", "B6", "F6", "F8", "S6", "W8", "W11", "W12", "W14", "R2", "R3", "V2")
@pytest.mark.parametrize("script", host_scripts.SCRIPTS, ids=lambda script: script.name)
def test_what_a_user_sees(script: host_scripts.Script, caplog: pytest.LogCaptureFixture) -> None:
    play = host_run.Play(script)
    if script.name in SEEN:
        kind, words = SEEN[script.name]
        with pytest.raises(kind, match=words):
            swept(play)
    else:
        trace = swept(play)
        assert trace.sound
        assert trace.label == "EMULATED"
        first, count = STRETCH_PAIRS
        assert (trace.full_rate.raw.first, len(trace.full_rate)) == (first, count)
        kept = raw_pairs(play.device.curve.records(96, 0)[0], first, count)
        assert trace.full_rate.raw.voltage.tolist() == [*memoryview(kept).cast("H")][::2]
        assert trace.full_rate.raw.current.tolist() == [*memoryview(kept).cast("H")][1::2]
    if "prompt" in script.name:
        assert "made up by a script" in caplog.text
    results = host_run.results([play])
    assert failed(results) == set(), told(clauses.HOST, results)


@pytest.mark.clause("F1", "F2", "F3", "F4", "F6", "F7", "F8", "B1", "B2", "B6", "H1", "H2", "H5")
@pytest.mark.clause("S1", "S6", "W1", "W3", "W5", "W7", "W8", "W10", "W11", "W12", "W14", "A2")
@pytest.mark.clause("R1", "R2", "R3", "C1", "C2", "T2", "V2", "V3", "K5", "K7", "K8")
def test_the_host_passes_every_clause() -> None:
    results = played()
    assert failed(results) == set(), told(clauses.HOST, results)
    assert outcomes(clauses.HOST, results, UNSEEN) == unseen(clauses.HOST)
    assert outcomes(clauses.HOST, results, NOT_TRIED) == set()


@pytest.mark.parametrize(
    ("broken", "wrong"), WRONG_HOSTS, ids=[wrong.__name__ for _, wrong in WRONG_HOSTS]
)
def test_a_wrong_host_fails_the_clauses_that_it_breaks(
    broken: set[str], wrong: Any, monkeypatch: Patch
) -> None:
    right = failed(played(knots=200))
    wrong(monkeypatch)
    results = played(knots=200)
    assert failed(results) == broken | right, told(clauses.HOST, results)


@pytest.mark.skipif(not host_run.ptys_exist(), reason="no pseudo-terminals on this system")
def test_a_host_is_checked_over_a_pseudo_terminal() -> None:
    words = [sys.executable, str(PACKAGE), "host", "--json", "--script", "plain sweep"]
    with subprocess.Popen(
        words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    ) as checker:
        assert checker.stderr is not None
        name = re.search(r"is (\S+):", checker.stderr.readline())
        assert name is not None
        with Tracer.open(name.group(1)) as tracer:
            assert tracer.sweep().label == "EMULATED"
        out, said = checker.communicate(timeout=20)
    rows = [json.loads(line) for line in out.splitlines()]
    assert [row for row in rows if row["outcome"] == FAILED] == []
    assert checker.returncode == 0, said
    assert rows[0]["check"] == "plain sweep"


# -- the checkers themselves -------------------------------------------------------------------


def test_the_clauses_are_those_of_the_specification() -> None:
    text = SPEC.read_text(encoding="utf-8")
    assert re.findall(r"^\*\*([A-Z]\d+)\.\*\*", text, re.MULTILINE) == list(clauses.CLAUSES)


def test_every_clause_that_shows_has_its_check() -> None:
    device = {name for check in device_run.CHECKS for name in check.clauses}
    assert device == {name for name, why in clauses.DEVICE.items() if why == clauses.CHECKED}
    tried = [*host_scripts.SCRIPTS, *host_rules.RULES]
    host = {name for check in tried for name in check.clauses}
    assert host == {name for name, why in clauses.HOST.items() if why == clauses.CHECKED}


def test_the_malformed_runs_are_malformed_in_the_way_they_say() -> None:
    runs = device_frames.no_frames()
    limit = framing.coded_limit(catalogue.MAX_FRAME, True)
    reasons = {}
    for what, run in runs.items():
        (bad,) = framing.Decoder(limit, True).feed(run + framing.DELIMITER)
        assert isinstance(bad, framing.Bad), what
        reasons[what] = bad.reason
        assert b"\x03" not in run
    assert set(reasons.values()) == {
        framing.BAD_LONG,
        framing.BAD_ESCAPE,
        framing.BAD_COBS,
        framing.BAD_SHORT,
        framing.BAD_CRC,
    }


def test_nothing_of_the_host_library_is_needed() -> None:
    """Whoever builds a host of their own has the protocol folder alone."""
    for path in PACKAGE.glob("*.py"):
        text = path.read_text(encoding="utf-8")
        assert not re.search(r"^\s*(from|import) kneewise", text, re.MULTILINE), path
    words = [sys.executable, "-S", str(PACKAGE), "host", "--help"]
    done = subprocess.run(words, capture_output=True, text=True, check=False)
    assert "--script" in done.stdout, done.stderr
    words = [sys.executable, str(PACKAGE), "device", "nowhere"]
    done = subprocess.run(words, capture_output=True, text=True, check=False)
    assert done.returncode == 1
    assert "nowhere" in done.stderr


def test_the_table_has_a_line_for_each_clause_and_says_what_failed() -> None:
    results = [
        Result("one", ("F1", "F2"), PASSED, "this", "this"),
        Result("two", ("F2",), FAILED, "this", "that"),
        Result("three", ("W1",), NOT_TRIED, "this", "needs --allow-sweep"),
    ]
    text = table(clauses.DEVICE, results)
    assert re.search(r"^F1 +passed +one$", text, re.MULTILINE)
    assert re.search(r"^F2 +FAILED +two\n +two: expected this\n +found that$", text, re.MULTILINE)
    assert re.search(r"^W1 +not tried +needs --allow-sweep$", text, re.MULTILINE)
    assert "B6" not in text, "binds the other side"
    assert text.endswith("not tried")
    assert "1 passed, 1 FAILED" in text
