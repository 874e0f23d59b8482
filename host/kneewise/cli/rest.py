"""`kneewise rest`: stop whatever is under way, bleed, and say in what state the tracer is."""

from __future__ import annotations

import json
from dataclasses import asdict
from typing import Annotated

import typer

from kneewise.cli.targets import On, Record, opened


def rest(
    on: On = "",
    clear_fault: Annotated[
        bool, typer.Option("--clear-fault", help="Clear a latched fault first.")
    ] = False,
    record: Record = None,
    as_data: Annotated[
        bool, typer.Option("--json", help="One JSON object on stdout, messages on stderr.")
    ] = False,
) -> None:
    """Stop, bleed, and show the state; the contact is open and the bleed engaged afterwards."""
    with opened(on, record) as tracer:
        if clear_fault and tracer.status().state == "fault":
            tracer.clear_fault()
        status = tracer.rest()
        label = tracer.label
    if as_data:
        typer.echo(json.dumps({"label": label, **asdict(status)}))
        return
    lines = [
        f"{label + ': ' if label else ''}{status.state}",
        f"  contact      {'closed' if status.contact_closed else 'open'}",
        f"  bleed        {'engaged' if status.bleed_engaged else 'released'}",
        f"  stop loop    {'closed' if status.stop_loop_closed else 'open'}",
        f"  capacitor    {status.capacitor_v:.2f} V"
        " (measure it yourself before touching the terminals)",
        f"  source       {status.source_v:.2f} V"
        f"{', leads reversed' if status.leads_reversed else ''}",
    ]
    if status.held_sweep:
        lines.append(
            f"  held sweep   {status.held_sweep[:8]}; the next `kneewise sweep` fetches it"
        )
    typer.echo("\n".join(lines))
