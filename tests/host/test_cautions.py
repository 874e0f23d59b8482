"""If these fail, somebody arms a real tracer without ever having been told what can hurt them, or
is told again and again and stops reading; or the pages say another thing than the command line.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path

import pytest
from typer.testing import CliRunner

from kneewise.cli.main import app
from kneewise.emulator.firmware import firmware_module
from kneewise.emulator.opener import connector, start
from kneewise.emulator.scenario import Scenario
from kneewise.errors import RefusedError
from kneewise.instrument import cautions, opened
from kneewise.instrument.opened import Opened
from kneewise.instrument.tracer import Tracer
from kneewise.workshop.pages import made_anew

ROOT = Path(__file__).parents[2]
READ = {"source_stands_alone": True, "cautions_read": True}


@pytest.fixture
def file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Where acknowledgements are kept, in this test."""
    path = tmp_path / "state" / "cautions.json"
    monkeypatch.setattr(cautions, "acknowledgements_file", lambda: path)
    return path


@pytest.fixture
def bench(file: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Opened]:
    """An emulated tracer that says of itself that it is a real one."""
    monkeypatch.setattr(firmware_module("hal_emulated").EmulatedHal, "EMULATED", False)
    emulated = start(Scenario.default(), "in-process")
    made = Opened(connect=connector(emulated), close=lambda: None, rung="tracer")
    monkeypatch.setitem(opened._OPENERS, "bench", lambda target: made)
    yield made
    emulated.close()


def armed(tracer: Tracer) -> bool:
    return any(seen.row()["message"] == "arm" for seen in tracer.frames.entries())


# -- for scripts ------------------------------------------------------------------------------


def test_nothing_is_armed_before_they_are_acknowledged(bench: Opened) -> None:
    with Tracer(bench, source_stands_alone=True) as tracer:
        assert tracer.label == ""
        with pytest.raises(RefusedError) as caught:
            tracer.sweep()
        assert not armed(tracer)
    for part in ("cautions not acknowledged", "cautions_read=True", "--cautions-read", "README.md"):
        assert part in str(caught.value)
    assert caught.value.exit_code == 3


def test_once_is_enough_for_a_tracer_and_its_profile(bench: Opened, file: Path) -> None:
    with Tracer(bench, **READ) as tracer:
        assert tracer.sweep().sound
    with Tracer(bench, source_stands_alone=True) as tracer:
        assert tracer.sweep().sound
    (entry,) = json.loads(file.read_text(encoding="utf-8"))["acknowledged"]
    assert entry["device_id"] == b"KNEEWISE".hex()
    assert entry["profile_crc"] == f"{tracer.device['profile_crc']:08x}"
    assert entry["edition"] == cautions.EDITION
    assert list(file.parent.iterdir()) == [file]


def test_another_profile_another_board_and_other_words_are_asked_for_anew(
    file: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def due(device_id: str, crc: int) -> bool:
        return cautions.Acknowledgement(device_id, crc, wanted=True).due

    assert due("4b", 1)
    cautions.Acknowledgement("4b", 1, wanted=True).give()
    cautions.Acknowledgement("4b", 2, wanted=True).give()
    assert not due("4b", 1)
    assert not due("4b", 2)
    assert due("4b", 3)
    assert due("4c", 1)
    monkeypatch.setattr(cautions, "EDITION", cautions.EDITION + 1)
    assert due("4b", 1)


def test_an_emulated_tracer_is_asked_for_nothing(file: Path) -> None:
    with Tracer.open("emulator:in-process", cautions_read=True) as tracer:
        assert tracer.sweep().sound
    assert not file.exists()


@pytest.mark.parametrize(
    "content", ["", "{", "[]", '{"acknowledged": [1]}', '{"acknowledged": 5}', "\udce4"]
)
def test_a_damaged_file_counts_as_nothing_acknowledged_and_says_so(
    content: str, bench: Opened, file: Path, caplog: pytest.LogCaptureFixture
) -> None:
    file.parent.mkdir()
    file.write_bytes(content.encode("utf-8", "surrogateescape"))
    with (
        Tracer(bench, source_stands_alone=True) as tracer,
        pytest.raises(RefusedError, match="is damaged"),
    ):
        tracer.sweep()
    assert f"{file} is damaged" in caplog.text
    with Tracer(bench, **READ) as tracer:
        assert tracer.sweep().sound
    assert not cautions.Acknowledgement(
        b"KNEEWISE".hex(), tracer.device["profile_crc"], wanted=True
    ).due


def test_a_folder_that_cannot_be_written_stops_no_work_and_says_so(
    bench: Opened, file: Path, caplog: pytest.LogCaptureFixture
) -> None:
    file.parent.write_text("a file where the folder should be", encoding="utf-8")
    with Tracer(bench, **READ) as tracer:
        assert tracer.sweep().sound
        assert "could not be kept" in tracer.cautions.remark
    assert "will be asked for again" in caplog.text


def test_a_crash_while_writing_leaves_the_old_file(
    file: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    cautions.Acknowledgement("4b", 1, wanted=True).give()

    def crash(one: object, other: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(cautions.os, "replace", crash)
    with pytest.raises(KeyboardInterrupt):
        cautions.Acknowledgement("4b", 2, wanted=True).give()
    assert not cautions.Acknowledgement("4b", 1, wanted=True).due
    assert list(file.parent.iterdir()) == [file]


# -- for people -------------------------------------------------------------------------------


def sweep(tmp_path: Path, *words: str, typed: str = "") -> tuple[str, BaseException | None]:
    """What the command line says, and what it raises."""
    done = CliRunner().invoke(
        app,
        ["sweep", "--on", "bench", "--stands-alone", "--store", str(tmp_path), *words],
        input=typed,
    )
    return done.stderr, done.exception


@pytest.fixture
def terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    """Input and messages at a terminal."""
    monkeypatch.setattr("kneewise.cli.cautions.at_terminal", lambda: True)


@pytest.mark.usefixtures("terminal")
def test_at_a_terminal_they_are_shown_once_and_yes_is_typed(bench: Opened, tmp_path: Path) -> None:
    said, raised = sweep(tmp_path, typed="yes\n")
    assert raised is None
    for caution in cautions.CAUTIONS:
        assert " ".join(caution.text.split()) in " ".join(said.split())
    assert "Type yes" in said
    said, raised = sweep(tmp_path)
    assert raised is None
    assert "Type yes" not in said
    assert cautions.REMINDER in said


@pytest.mark.usefixtures("terminal")
@pytest.mark.parametrize("typed", ["y\n", "no\n", "yes please\n"])
def test_another_answer_arms_nothing(typed: str, bench: Opened, tmp_path: Path, file: Path) -> None:
    _, raised = sweep(tmp_path, typed=typed)
    assert isinstance(raised, RefusedError)
    assert "nothing was armed" in str(raised)
    assert not file.exists()


def test_where_no_terminal_can_ask_an_option_says_it(bench: Opened, tmp_path: Path) -> None:
    _, raised = sweep(tmp_path)
    assert isinstance(raised, RefusedError)
    assert "--cautions-read" in str(raised)
    said, raised = sweep(tmp_path, "--cautions-read")
    assert raised is None
    assert "Type yes" not in said


# -- one text in all places -------------------------------------------------------------------


def test_the_pages_say_what_the_command_line_says() -> None:
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    assert cautions.BEGIN in readme
    for page in ("README.md", "device/README.md"):
        text = (ROOT / page).read_text(encoding="utf-8")
        assert text == made_anew(text), f"run: python -m kneewise.workshop.pages {page}"


def test_they_say_what_has_to_be_said_and_where_it_comes_from() -> None:
    text = " ".join(cautions.as_text().split())
    for words in (
        "Isolate the module",
        "cover it or work at low light",
        "rated for",
        "Never unplug a connector under load",
        "measured discharge",
        "60 V dc and above is for qualified people only",
        "Local codes and licensed practice come first",
        "IEC 61010-1",
        "IEC 60364-7-712",
        "from memory",
    ):
        assert words in text
    assert all(caution.source for caution in cautions.CAUTIONS)
