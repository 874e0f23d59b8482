"""`kneewise emulate`: an emulated tracer on a pty, for any serial program."""

from __future__ import annotations

import json
import signal
import time
from pathlib import Path
from typing import Annotated

import typer

from kneewise.errors import UsageError

LOOK_S = 0.2


def emulate(
    scenario: Annotated[
        Path | None, typer.Argument(metavar="[SCENARIO.toml]", help="Default: clear noon.")
    ] = None,
    example: Annotated[
        bool, typer.Option("--example", help="Print a commented scenario and leave.")
    ] = False,
    as_data: Annotated[
        bool, typer.Option("--json", help="One JSON object on stdout, messages on stderr.")
    ] = False,
) -> None:
    """Serve an emulated tracer on a pty and print the pty's name; Ctrl-C ends it."""
    from kneewise.emulator.scenario import Scenario, example_text

    if example:
        typer.echo(example_text(), nl=False)
        return
    from kneewise.emulator.opener import start
    from kneewise.emulator.process import ProcessTracer

    # A supervisor's SIGTERM ends it as Ctrl-C does: the pty and its folder are taken away.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    loaded = Scenario.load(scenario) if scenario is not None else Scenario.default()
    tracer = start(loaded)
    try:
        if not isinstance(tracer, ProcessTracer):
            raise UsageError(
                "serving an emulated tracer on a pty",
                found="no MicroPython for this platform",
                expected="Linux on x86-64",
                next_step="sweep with --on emulator, which needs no pty here",
            )
        if as_data:
            typer.echo(json.dumps({"label": "EMULATED", "port": tracer.port_name}))
        else:
            typer.echo(f"EMULATED tracer ({loaded.title}, {loaded.place}) on {tracer.port_name}")
            typer.echo(f"Try: kneewise sweep --on {tracer.port_name}")
            typer.echo("Ctrl-C ends it.", err=True)
        while tracer.running:
            time.sleep(LOOK_S)
    except KeyboardInterrupt:
        pass
    finally:
        tracer.close()
