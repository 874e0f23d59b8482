"""`kneewise rest`: stop whatever is under way, bleed, and say in what state the tracer is."""

from __future__ import annotations

import json
from dataclasses import asdict
from typing import Annotated

import typer

from kneewire.catalogue import RESET_CAUSES
from kneewise.cli.targets import On, Record, opened
from kneewise.errors import DeviceFaultError

WELDED = 2  # the hazard


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
    """Stop, bleed, and show the state; in a fault too, which is then told."""
    with opened(on, record) as tracer:
        if clear_fault and tracer.status().state == "fault":
            tracer.clear_fault()
        fault: DeviceFaultError | None = None
        try:
            status = tracer.rest()
        except DeviceFaultError as error:
            fault, status = error, tracer.status()
        book = tracer.logbook()
        cause = RESET_CAUSES.get(tracer.device["reset_cause"], "unknown")
        label = tracer.label
    if as_data:
        data = {"label": label, **asdict(status), "reset_cause": cause, "logbook": asdict(book)}
        typer.echo(json.dumps(data, default=str))
        if fault is not None:
            raise fault
        return
    live = fault is not None and fault.guard == WELDED
    lines = [
        f"{label + ': ' if label else ''}{status.state}",
        f"  contact      {'closed' if status.contact_closed else 'open'}",
        f"  bleed        {'engaged' if status.bleed_engaged else 'released'}",
        f"  stop loop    {'closed' if status.stop_loop_closed else 'open'}",
        f"  capacitor    {status.capacitor_v:.2f} V"
        + (", LIVE" if live else "")
        + " (measure it yourself before touching the terminals)",
        f"  source       {status.source_v:.2f} V"
        f"{', leads reversed' if status.leads_reversed else ''}",
        f"  bleed heat   {status.bleed_heat_j:.1f} J"
        + (f"; ready for a sweep in {status.rest_s:.1f} s" if status.rest_s else ""),
        f"  operations   {book.operations} of the contact, {book.hot_openings} openings under load"
        + (" since an earlier logbook was lost" if book.begun_anew else ""),
        f"  proof test   {book.proven or 'never'}",
        f"  last reset   {cause}",
    ]
    if status.held_sweep:
        lines.append(
            f"  held sweep   {status.held_sweep[:8]}; the next `kneewise sweep` fetches it"
        )
    typer.echo("\n".join(lines))
    if fault is not None:
        raise fault
