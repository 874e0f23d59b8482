"""The cautions on the command line: shown once at a terminal, answered by `yes`."""

from __future__ import annotations

import sys
from typing import Annotated

import typer

from kneewise.errors import RefusedError
from kneewise.instrument.cautions import as_text, demand
from kneewise.instrument.tracer import Tracer

CautionsRead = Annotated[
    bool,
    typer.Option(
        "--cautions-read",
        help="Confirm that you have read the cautions (README.md); wanted once for each tracer "
        "and profile where no terminal can ask.",
    ),
]


def at_terminal() -> bool:
    """Whether somebody can be asked."""
    return sys.stdin.isatty() and sys.stderr.isatty()


def heed(tracer: Tracer, confirmed: bool) -> None:
    """Have the cautions of a real tracer acknowledged, once. RefusedError."""
    cautions = tracer.cautions
    if cautions.remark:
        typer.echo(cautions.remark, err=True)
    if not cautions.due:
        return
    if not confirmed:
        if not at_terminal():
            demand(cautions)
        typer.echo(as_text(), err=True)
        answer = typer.prompt("\nType yes if you have read them and will heed them", err=True)
        if answer.strip().lower() != "yes":
            raise RefusedError(
                "asking for the cautions to be acknowledged",
                found=repr(answer),
                expected="yes",
                next_step="read them, then start again; nothing was armed",
            )
    known = cautions.remark
    cautions.give()
    if cautions.remark != known:
        typer.echo(cautions.remark, err=True)
