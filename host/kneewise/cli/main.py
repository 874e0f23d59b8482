"""`kneewise`: the verbs, and what an error becomes on the terminal.

Exit codes: 0 done, 1 failed, 2 usage, 3 refused by an interlock, 4 link lost, 5 result not to
be trusted.
"""

from __future__ import annotations

import sys
from typing import Annotated

import typer

import kneewise
from kneewise.cli import emulate, prove, rest, sweep, wire
from kneewise.errors import KneewiseError

app = typer.Typer(
    name="kneewise",
    help="Sweeps, traces and figures from a capacitor-load I-V tracer.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"]},
)
app.command("sweep", epilog="Example: kneewise sweep --on emulator --full-rate knee")(sweep.sweep)
app.command("prove", epilog="Example: kneewise prove --on emulator --store proofs")(prove.prove)
app.command("rest", epilog="Example: kneewise rest --on emulator")(rest.rest)
app.command("wire", epilog="Example: kneewise wire session.jsonl")(wire.wire)
app.command("emulate", epilog="Example: kneewise emulate --example > my_module.toml")(
    emulate.emulate
)


def _version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"kneewise {kneewise.__version__}")
        raise typer.Exit


@app.callback()
def common(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Show the version.")
    ] = False,
) -> None:
    """Sweeps, traces and figures from a capacitor-load I-V tracer."""


def main() -> None:
    """Run the command line; KneewiseError becomes a message with its next step."""
    try:
        app()
    except KneewiseError as error:
        print(
            f"Not done: {error.what}\n"
            f"  found     {error.found}\n"
            f"  expected  {error.expected}\n"
            f"  next      {error.next_step}",
            file=sys.stderr,
        )
        sys.exit(error.exit_code)


if __name__ == "__main__":
    main()
