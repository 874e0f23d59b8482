"""`kneewise sweep`: one sweep, its figures, its file and its picture."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated

import typer

from kneewise.cli.summary import as_json, as_text
from kneewise.cli.targets import On, Record, opened
from kneewise.errors import TrustError
from kneewise.instrument.trace import Trace

CAUTION = (
    "Caution: a PV source in light is live, and a charged capacitor can injure. Local codes and "
    "licensed practice come first."
)


def sweep(
    on: On = "",
    knots: Annotated[int, typer.Option(min=16, max=512, help="Points of the curve.")] = 96,
    limit_s: Annotated[
        float, typer.Option("--limit", min=0.01, max=120, help="Longest closed time, s.")
    ] = 10.0,
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
    record: Record = None,
    as_data: Annotated[
        bool, typer.Option("--json", help="One JSON object on stdout, messages on stderr.")
    ] = False,
) -> None:
    """Sweep once: arm, fire, capture, bleed, fetch, check, store, draw."""
    files: list[Path] = []

    def say(text: str) -> None:
        typer.echo(text, err=True)

    def keep(trace: Trace) -> None:
        from kneewise.archive.store import save

        files.append(save(trace, store))

    with opened(on, record, stands_alone=stands_alone) as tracer:
        if not tracer.label:
            say(CAUTION)
        earlier = tracer.held(keep=keep)
        if earlier is not None:
            say(f"An earlier sweep was still held on the tracer: stored as {files.pop()}")
        trace = tracer.sweep(knots=knots, limit_s=limit_s, keep=keep, progress=say)
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


def _draw(trace: Trace, path: Path) -> Path:
    from kneewise.report.plots import curve_picture

    return curve_picture(trace, path)
