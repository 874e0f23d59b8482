"""If these fail, a technician is not told what to do at the bench, a failed test is noted on the
tracer as passed, or a tracer that was never proven sweeps without a word.
"""

from __future__ import annotations

import json
from datetime import UTC, date, datetime, timedelta

import pytest
from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey
from proving import Bench, pem_of
from typer.testing import CliRunner

from kneewise.cli import prove as verb
from kneewise.cli.main import app
from kneewise.emulator.firmware import firmware_module
from kneewise.errors import UsageError
from kneewise.instrument import cautions, opened
from kneewise.instrument.logbook import EPOCH, Logbook, proof_due
from kneewise.instrument.tracer import Tracer
from kneewise.workshop import report

TODAY = datetime.now(UTC).date()


# -- the command line -------------------------------------------------------------------------


def run(*words, typed=""):
    return CliRunner().invoke(app, [*map(str, words)], input=typed)


def test_a_test_that_passed_is_stored_and_noted_on_the_tracer(tmp_path):
    own, public = pem_of(Ed25519PrivateKey.generate(), tmp_path)
    words = ("prove", "--on", "emulator:in-process", "--store", tmp_path, "--sign", own)
    done = run(*words)
    assert done.exit_code == 0
    assert done.stdout.startswith("EMULATED: proof test of tracer 4b4e454557495345 passed\n")
    assert "  not here   H8 H17 H18 H19\n" in done.stdout
    assert "noted      on the tracer, kept over power cycles" in done.stdout
    (file,) = tmp_path.glob("*.json")
    checked = run("prove", "--check", file, "--public-key", public)
    assert checked.exit_code == 0
    assert "  seal       holds, " in checked.stdout
    assert checked.stdout.rstrip().endswith("the key given")
    data = json.loads(run("prove", "--check", file, "--json").stdout)
    assert (data["seal"], data["verdict"], data["label"]) == ("holds", "passed", "EMULATED")


def test_for_scripts_the_report_is_on_stdout(tmp_path):
    done = run("prove", "--on", "emulator:in-process", "--store", tmp_path, "--json")
    assert done.exit_code == 0
    data = json.loads(done.stdout)
    assert data["report"]["verdict"] == "passed"
    assert data["noted"] is True
    assert report.digest_of(data["report"]).hex() == data["seal"]["sha256"]
    assert "A7  firmware that hangs (H7 supervision stopped" in done.stderr


@pytest.fixture
def bench(monkeypatch):
    """What `--on bench` opens."""
    made = []

    def make(*given, **more):
        one = Bench(*given, **more)
        made.append(one)
        monkeypatch.setitem(opened._OPENERS, "bench", lambda target: one.tracer.connection.opened)
        return one

    yield make
    for one in made:
        one.close()


def test_a_test_that_failed_is_stored_and_not_noted(bench, tmp_path):
    one = bench({"load": {"capacitance_of_nominal": 0.6}})
    done = run("prove", "--on", "bench", "--store", tmp_path)
    assert done.exit_code == 1
    assert "proof test of tracer 4b4e454557495345 failed" in done.stdout
    assert "  stopped    after B6, whole sweep, which failed" in done.stdout
    assert "  B6         fault: H15" in done.stdout
    assert "noted" not in done.stdout
    (file,) = tmp_path.glob("*.json")
    assert report.check(file).report["verdict"] == "failed"
    one.tracer.connection.rejoin()
    assert one.tracer.logbook().proven is None


def test_the_list_of_guards():
    text = run("prove", "--list")
    assert text.exit_code == 0
    assert text.stdout.startswith("H1   capacitor still charged\n")
    data = json.loads(run("prove", "--list", "--json").stdout)
    assert [row["hazard"] for row in data] == list(range(1, 22))


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("--public-key", "public.pem"), "without --check"),
        (("--on", "emulator:in-process", "--sign", "none.pem"), "an Ed25519 key"),
    ],
)
def test_wrong_usage(words, said, tmp_path):
    done = run("prove", "--store", tmp_path, *words)
    assert isinstance(done.exception, UsageError)
    assert said in str(done.exception)


def test_an_emulated_tracer_behind_a_port_has_nobody_at_its_bench(bench, tmp_path, monkeypatch):
    one = bench()
    without = opened.Opened(
        connect=one.tracer.connection.opened.connect, close=lambda: None, rung="tracer"
    )
    monkeypatch.setitem(opened._OPENERS, "bench", lambda target: without)
    done = run("prove", "--on", "bench", "--store", tmp_path)
    assert isinstance(done.exception, UsageError)
    assert "nobody at its bench" in str(done.exception)


# -- a technician at a real bench -------------------------------------------------------------


@pytest.fixture
def real(bench, monkeypatch, tmp_path):
    """A tracer that says that it is a real one, at a terminal where somebody does what is asked."""
    monkeypatch.setattr(firmware_module("hal_emulated").EmulatedHal, "EMULATED", False)
    monkeypatch.setattr(cautions, "acknowledgements_file", lambda: tmp_path / "cautions.json")
    monkeypatch.setattr(verb, "at_terminal", lambda: True)
    monkeypatch.setattr("kneewise.cli.cautions.at_terminal", lambda: True)
    monkeypatch.setattr(verb.time, "sleep", lambda seconds: None)
    one = bench()
    plain = opened.Opened(
        connect=one.tracer.connection.opened.connect, close=lambda: None, rung="tracer"
    )
    monkeypatch.setitem(opened._OPENERS, "bench", lambda target: plain)
    do = verb.TerminalOperator.do

    def doing(operator, task, **values):
        do(operator, task, **values)
        one.hands.do(task, values)

    monkeypatch.setattr(verb.TerminalOperator, "do", doing)
    return one


ANSWERS = ["yes", "", "yes", *[""] * 3, "twenty", "50", "20,0 V", "1", *[""] * 4, "0.02", *[""] * 2]


def test_a_person_is_told_what_to_do_and_asked_for_what_they_read_off(real, tmp_path):
    done = run("prove", "--on", "bench", "--store", tmp_path, typed="\n".join(ANSWERS) + "\n")
    assert done.exit_code == 0, done.output
    for words in (
        cautions.LEAD[:40],
        "Your name, for the report",
        "> Open the lid, or press the stop switch, and leave it so.",
        "'twenty' is no number: write for example 15",
        "50 V is not within 10 to 30 V",
        "Put a resistor of about 20 ohm, 25 W, in series",
        "Press Enter, then do it",
        "44 s left",
    ):
        assert words in done.stderr, words
    assert "\nproof test of tracer 4b4e454557495345 passed\n" in done.stdout
    assert "EMULATED" not in done.output
    real.tracer.connection.rejoin()
    book = real.tracer.logbook()
    assert book.proven == TODAY
    (file,) = tmp_path.glob("*proof*.json")
    assert book.proof_digest == report.check(file).sha256[:32]


def test_input_that_ends_stops_the_test_safely(real, tmp_path):
    typed = "\n".join(ANSWERS[:10]) + "\n"
    done = run("prove", "--on", "bench", "--store", tmp_path, typed=typed)
    assert done.exit_code == 1
    assert "proof test of tracer 4b4e454557495345 stopped" in done.stdout
    assert "input has ended" in done.stdout
    assert "safe, contact open, bleed engaged" in done.stdout


# -- when it is due ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("ago", "said"),
    [(None, "never proven"), (0, ""), (90, ""), (91, "91 days ago"), (-3, "a day to come")],
)
def test_when_a_proof_test_is_due(ago, said):
    proven = None if ago is None else date(2031, 5, 6) - timedelta(days=ago)
    due = proof_due(Logbook(1, 0, proven, "00"), 90, date(2031, 5, 6))
    assert (said in due) if said else not due
    assert not due or "kneewise prove" in due


def test_an_emulated_tracer_says_nothing_unless_its_logbook_has_an_old_date(bench, tmp_path):
    one = bench()
    words = ("sweep", "--on", "bench", "--store", tmp_path)
    assert "kneewise prove" not in run(*words).stderr
    one.tracer.connection.rejoin()
    one.tracer.note_proof((TODAY - EPOCH).days - 100, bytes(16))
    assert "was 100 days ago" in run(*words).stderr
    one.tracer.connection.rejoin()
    one.tracer.note_proof((TODAY - EPOCH).days, bytes(16))
    assert "kneewise prove" not in run(*words).stderr


def test_a_real_tracer_that_was_never_proven_says_so(real, tmp_path, caplog):
    words = ("sweep", "--on", "bench", "--stands-alone", "--cautions-read", "--store", tmp_path)
    done = run(*words)
    assert done.exit_code == 0
    assert "never proven: run `kneewise prove`" in done.stderr
    with Tracer(real.tracer.connection.opened, source_stands_alone=True) as tracer:
        caplog.clear()
        tracer.sweep()
        tracer.sweep()
    assert caplog.text.count("never proven") == 1
