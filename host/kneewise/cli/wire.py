"""`kneewise wire`: what goes over the link, live or from a recording, as a table or as JSON."""

from __future__ import annotations

import json
import shutil
import sys
from dataclasses import replace
from pathlib import Path
from typing import Annotated, Any

import typer

from kneewise.cli.targets import On, opened
from kneewise.errors import UsageError
from kneewise.instrument.trace import REPLAY, label_of
from kneewise.instrument.tracer import Tracer
from kneewise.link.frames import Seen
from kneewise.link.recording import Recording, frames_of, read_recording

STATUS_S = 1.0
# Name of a column and its width; fields, or a remark, take the rest of the line.
COLUMNS = (
    ("time s", 10),
    ("way", 9),
    ("message", 17),
    ("session", 8),
    ("sequence", 10),
    ("bytes", 5),
)
RIGHT = ("time s", "sequence", "bytes")


def wire(
    file: Annotated[
        Path | None, typer.Argument(metavar="[FILE]", help="A recording made with --record.")
    ] = None,
    on: On = "",
    seconds: Annotated[
        float, typer.Option(min=0.0, max=86400.0, help="How long to look on, live, s.")
    ] = 5.0,
    as_data: Annotated[
        bool, typer.Option("--json", help="One JSON object a frame, messages on stderr.")
    ] = False,
) -> None:
    """Show the frames of a recording, or live those of a tracer that is asked for its status."""
    if file is not None and on:
        raise UsageError(
            "showing frames",
            found=f"a recording ({file}) and a tracer ({on})",
            expected="one of them",
            next_step="leave out the file to look on live, or --on to read the recording",
        )
    if file is not None:
        _recorded(read_recording(file), as_data)
    else:
        with opened(on) as tracer:
            _live(tracer, seconds, as_data)


def _recorded(recording: Recording, as_data: bool) -> None:
    show = _Show(label_of(recording.emulated, REPLAY), as_data)
    show.heading(f"{recording.path}, {recording.remark()}")
    for seen in frames_of(recording):
        show(seen)


def _live(tracer: Tracer, seconds: float, as_data: bool) -> None:
    show = _Show(tracer.label, as_data)
    show.heading("live")
    earlier = list(tracer.frames.entries())
    begun_s = earlier[0].time_s

    def since(seen: Seen) -> None:
        show(replace(seen, time_s=seen.time_s - begun_s))

    for seen in earlier:
        since(seen)
    tracer.frames.watch = since
    left = seconds
    try:
        while left > 0:
            tracer.status()
            tracer.listen(min(left, STATUS_S))
            left -= STATUS_S
    except KeyboardInterrupt:
        pass
    finally:
        typer.echo(tracer.frames.summary(), err=as_data)


def _width() -> int | None:
    """Columns of the terminal; None where a file or a program gets the lines, and gets all."""
    return shutil.get_terminal_size().columns if sys.stdout.isatty() else None


class _Show:
    """Prints entries as they come."""

    def __init__(self, label: str, as_data: bool) -> None:
        self.label = label
        self.as_data = as_data
        self._width = _width()

    def heading(self, text: str) -> None:
        heading = f"{self.label}: {text}" if self.label else text
        typer.echo(heading, err=self.as_data)
        if not self.as_data:
            self._line([name for name, _ in COLUMNS], "fields")

    def __call__(self, seen: Seen) -> None:
        row = seen.row()
        if self.as_data:
            typer.echo(json.dumps({"label": self.label, **row}))
            return
        session = f"{row['session']:08x}" if "session" in row else ""
        cells = [
            f"{row['time_s']:.6f}",
            row["way"],
            row["message"],
            session,
            str(row.get("sequence", "")),
            str(row["bytes"]),
        ]
        self._line(cells, _said(row))

    def _line(self, cells: list[str], rest: str) -> None:
        parts = [
            f"{cell:>{width}}" if name in RIGHT else f"{cell:{width}}"
            for (name, width), cell in zip(COLUMNS, cells, strict=True)
        ]
        line = " ".join([*parts, rest]).rstrip()
        if self._width is not None and len(line) > self._width:
            line = line[: max(self._width - 3, 0)] + "..."
        typer.echo(line)


def _said(row: dict[str, Any]) -> str:
    """The fields of a row, or its remark; what a device says may hold line ends."""
    if row["remark"]:
        return " | ".join(line.strip() for line in row["remark"].splitlines() if line.strip())
    return ", ".join(f"{name} {value}" for name, value in row["fields"].items())
