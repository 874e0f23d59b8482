"""`kneewise prove`: the guards as a table, a guided proof test, and a stored report checked."""

from __future__ import annotations

import getpass
import json
import time
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from kneewise.cli.cautions import CautionsRead, at_terminal, heed
from kneewise.cli.targets import On, opened
from kneewise.errors import UsageError
from kneewise.instrument.hands import Reading, Task
from kneewise.instrument.tracer import Tracer
from kneewise.workshop import guard_table
from kneewise.workshop.evidence import FAILED, NOT_DONE, NOT_HERE, PASSED, StoppedError
from kneewise.workshop.operator import (
    READINGS,
    UNITS,
    EmulatedOperator,
    Operator,
    words_of,
    wrapped,
)

if TYPE_CHECKING:
    from kneewise.workshop.report import Stored

COUNT_S = 10
_RESULTS = {
    FAILED: "failed",
    NOT_DONE: "not done",
    PASSED: "passed",
    NOT_HERE: "not here",
}


def prove(
    on: On = "",
    list_guards: Annotated[
        bool, typer.Option("--list", help="Show the guards H1 to H21 and leave.")
    ] = False,
    check: Annotated[
        Path | None,
        typer.Option("--check", metavar="FILE", help="Check the seal of a report, a .json file."),
    ] = None,
    public_key: Annotated[
        Path | None,
        typer.Option(
            "--public-key", metavar="PEM", help="With --check: who must have signed the report."
        ),
    ] = None,
    sign: Annotated[
        Path | None,
        typer.Option("--sign", metavar="PEM", help="Sign the report with this Ed25519 key."),
    ] = None,
    store: Annotated[Path, typer.Option(help="Folder for the report and its page.")] = Path(
        "proofs"
    ),
    who: Annotated[str, typer.Option("--who", help="Who stands at the bench.")] = "",
    cautions_read: CautionsRead = False,
    as_data: Annotated[
        bool, typer.Option("--json", help="One JSON object on stdout, messages on stderr.")
    ] = False,
) -> None:
    """Prove the guards at the bench: first without a source, then with a current-limited supply.

    You are told what to do; each step says what was measured and within which limits. A test that
    passed is noted on the tracer. Exit code 0: passed, 1: failed or stopped.
    """
    if list_guards:
        data = json.dumps(guard_table.as_data()) if as_data else guard_table.as_text()
        typer.echo(data)
    elif check is not None:
        _check(check, public_key, as_data)
    elif public_key is not None:
        raise UsageError(
            "proving a tracer",
            found="--public-key without --check",
            expected="--sign KEY.pem to sign a report, or --check FILE to check one",
            next_step="name the report with --check",
        )
    else:
        _prove(on, sign, store, who, cautions_read, as_data)


# -- the test ---------------------------------------------------------------------------------


def _prove(
    on: str, sign: Path | None, folder: Path, who: str, cautions_read: bool, as_data: bool
) -> None:
    from kneewise.workshop import report
    from kneewise.workshop.prooftest import prove as run

    key = None if sign is None else report.private_key(sign)
    with opened(on) as tracer:
        heed(tracer, cautions_read)
        operator = _operator(tracer, who)
        test = run(tracer, operator)
        stored = report.store(test.content(), folder, key)
        kept = report.note(tracer, stored) if test.verdict == PASSED else False
    if as_data:
        typer.echo(json.dumps({**stored.document, "file": str(stored.file), "noted": kept}))
    else:
        typer.echo(_summary(stored, kept))
    if test.verdict != PASSED:
        raise typer.Exit(1)


def _operator(tracer: Tracer, who: str) -> Operator:
    hands = tracer.connection.opened.hands
    if hands is not None:
        return EmulatedOperator(hands, _say)
    if tracer.label:
        raise UsageError(
            "proving an emulated or replayed tracer",
            found=f"{tracer.label}, and nobody at its bench",
            expected="an emulated bench with hands, or a real tracer",
            next_step="kneewise prove --on emulator",
        )
    if not at_terminal():
        raise UsageError(
            "proving a tracer",
            found="no terminal",
            expected="an operator at a terminal, who is told what to do",
            next_step="run it at a terminal, beside the bench",
        )
    return TerminalOperator(
        who or typer.prompt("Your name, for the report", default=getpass.getuser(), err=True)
    )


def _say(text: str) -> None:
    typer.echo(text, err=True)


def _ask(text: str) -> str:
    """An answer. KeyboardInterrupt for Ctrl-C, StoppedError where input has ended."""
    try:
        return str(typer.prompt(text, default="", show_default=False, err=True))
    except typer.Abort as error:
        if isinstance(error.__context__, EOFError):
            raise StoppedError("input has ended") from error
        raise KeyboardInterrupt from None


class TerminalOperator:
    """A person at the bench."""

    def __init__(self, who: str) -> None:
        self.who = who

    def tell(self, text: str) -> None:
        _say(text)

    def do(self, task: Task, **values: float) -> None:
        _say("\n" + wrapped("  > ", words_of(task, values)))
        if task == Task.WAIT:
            _count_down(values["seconds"])
        else:
            first = task == Task.PULL_POWER
            _ask("  Press Enter, then do it" if first else "  Press Enter when done")

    def number(self, reading: Reading, low: float, high: float) -> float:
        unit = UNITS[reading]
        while True:
            answer = _ask(f"\n  > {READINGS[reading]}, {low:g} to {high:g} {unit}")
            try:
                value = float(answer.strip().removesuffix(unit).replace(",", "."))
            except ValueError:
                _say(f"    {answer!r} is no number: write for example {high / 2:g}")
                continue
            if low <= value <= high:
                return value
            _say(f"    {value:g} {unit} is not within {low:g} to {high:g} {unit}")

    def confirm(self, statement: str) -> bool:
        _say("\n" + wrapped("  > ", statement))
        return _ask("  Type yes if it is so").strip() == "yes"


def _count_down(seconds: float) -> None:
    left = seconds
    while left > 0:
        _say(f"    {left:.0f} s left")
        time.sleep(min(left, COUNT_S))
        left -= COUNT_S


def _summary(stored: Stored, kept: bool) -> str:
    report = stored.document["report"]
    label = f"{report['label']}: " if report["label"] else ""
    lines = [
        f"{label}proof test of tracer {report['device_id']} {report['verdict']}",
        f"  profile    {report['profile']['name']} (CRC {report['profile']['crc']})",
    ]
    results: dict[str, list[str]] = {result: [] for result in _RESULTS}
    for row in report["guards"]:
        results.setdefault(row["result"], []).append(f"H{row['hazard']}")
    lines += [
        f"  {_RESULTS[result]:10} {' '.join(names)}" for result, names in results.items() if names
    ]
    if report["stopped"]:
        lines.append(f"  stopped    {report['stopped']}")
        lines += [
            f"  {step['id']:10} {step['reason']}"
            for step in report["steps"]
            if step["result"] == "failed"
        ]
    lines += [f"  left       {report['left']}"]
    if report["verdict"] == PASSED:
        where = "kept over power cycles" if kept else "until it loses its power: it cannot store it"
        lines.append(f"  noted      on the tracer, {where}")
    lines += [
        f"  seal       {stored.document['seal']['sha256']}",
        f"  report     {stored.file}",
        f"  page       {stored.page}",
    ]
    return "\n".join(lines)


# -- a stored report --------------------------------------------------------------------------


def _check(file: Path, public_key: Path | None, as_data: bool) -> None:
    from kneewise.workshop import report

    key = None if public_key is None else report.public_key(public_key)
    checked = report.check(file, key)
    found = checked.report
    if as_data:
        data: dict[str, Any] = {
            "label": found["label"],
            "seal": "holds",
            "sha256": checked.sha256,
            "signature": checked.signature,
            "signed_by": checked.signed_by,
            "verdict": found["verdict"],
            "device_id": found["device_id"],
            "profile": found["profile"],
            "ended_utc": found["ended_utc"],
            "who": found["who"],
        }
        typer.echo(json.dumps(data))
        return
    label = f"{found['label']}: " if found["label"] else ""
    typer.echo(
        f"{label}proof test of tracer {found['device_id']} {found['verdict']}\n"
        f"  profile    {found['profile']['name']} (CRC {found['profile']['crc']})\n"
        f"  by         {found['who']}, {found['ended_utc']}\n"
        f"  seal       holds, {checked.sha256}\n"
        f"  signature  {checked.signature}"
    )
