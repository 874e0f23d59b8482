"""`kneewise sweep`: one sweep, its figures, its file and its picture."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated

import typer

from kneewise.cli.cautions import CautionsRead, heed
from kneewise.cli.summary import as_json, as_text
from kneewise.cli.targets import On, Record, opened
from kneewise.errors import KneewiseError, TrustError, UsageError
from kneewise.instrument.cautions import REMINDER
from kneewise.instrument.full_rate import FullRate
from kneewise.instrument.trace import Trace


def sweep(
    on: On = "",
    knots: Annotated[int, typer.Option(min=16, max=512, help="Points of the curve.")] = 96,
    limit_s: Annotated[
        float, typer.Option("--limit", min=0.01, max=120, help="Longest closed time, s.")
    ] = 10.0,
    full_rate: Annotated[
        str,
        typer.Option(
            "--full-rate",
            metavar="START:DURATION",
            help="Keep each pair of a stretch of the sweep, ms after conduction began, for "
            'example 6.5:8; "knee" or knee:DURATION for one about the maximum power, as a scout '
            "sweep finds it.",
        ),
    ] = "",
    scout: Annotated[
        bool,
        typer.Option(
            "--scout",
            help="Sweep coarsely first; it steers the sweep (pairs kept about the maximum power, "
            "closed time) and the two are compared.",
        ),
    ] = False,
    store: Annotated[Path, typer.Option(help="Folder for the trace.")] = Path("traces"),
    picture: Annotated[
        Path | None,
        typer.Option(help="Picture file, .png or .svg; default: beside the trace."),
    ] = None,
    stands_alone: Annotated[
        bool,
        typer.Option(
            "--stands-alone",
            help="Confirm that nothing but the PV source feeds its terminals: no battery, "
            "no inverter, no parallel string.",
        ),
    ] = False,
    cautions_read: CautionsRead = False,
    record: Record = None,
    as_data: Annotated[
        bool, typer.Option("--json", help="One JSON object on stdout, messages on stderr.")
    ] = False,
) -> None:
    """Sweep once: arm, fire, capture, bleed, fetch, check, store, draw."""
    stretch = stretch_of(full_rate) if full_rate else None
    files: list[Path] = []

    def say(text: str) -> None:
        typer.echo(text, err=True)

    def keep(trace: Trace) -> None:
        from kneewise.archive.store import save

        files.append(save(trace, store))

    with opened(on, record, stands_alone=stands_alone) as tracer:
        heed(tracer, cautions_read)
        if not tracer.label:
            say(REMINDER)
        due = tracer.proof_due()
        if due:
            say(due)
        earlier = tracer.held(keep=keep)
        if earlier is not None:
            say(f"An earlier sweep was still held on the tracer: stored as {files.pop()}")
        try:
            trace = tracer.sweep(
                knots=knots,
                limit_s=limit_s,
                full_rate=stretch,
                scout=scout,
                keep=keep,
                progress=say,
            )
        except KneewiseError:
            if files:
                say(f"What was swept is stored as {files.pop()}")
            raise
    file = files[0]
    drawn = _draw(trace, picture or file.with_suffix(".png"))
    if as_data:
        typer.echo(json.dumps(as_json(trace, file, drawn)))
    else:
        typer.echo(as_text(trace, file, drawn))
    if not trace.sound:
        failed = [check for check in trace.checks if not check.holds]
        raise TrustError(
            f"checking sweep {trace.trace_id[:8]}",
            found="; ".join(f"{check.name}: {check.found}" for check in failed),
            expected="; ".join(f"{check.name}: {check.expected}" for check in failed),
            next_step="the trace is stored, marked as not to be trusted; mend the cause and "
            "sweep again",
        )


def stretch_of(text: str) -> FullRate:
    """What `--full-rate` means. UsageError."""
    start, colon, duration = text.partition(":")
    try:
        return FullRate(
            start_s=None if start == "knee" else 1e-3 * float(start),
            duration_s=1e-3 * float(duration) if colon or start != "knee" else None,
        )
    except ValueError:
        raise UsageError(
            "reading --full-rate",
            found=repr(text),
            expected="START:DURATION in ms, knee, or knee:DURATION",
            next_step="write for example --full-rate 6.5:8 or --full-rate knee",
        ) from None


def _draw(trace: Trace, path: Path) -> Path:
    from kneewise.report.plots import curve_picture

    return curve_picture(trace, path)
