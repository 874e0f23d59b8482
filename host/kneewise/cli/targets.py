"""Which tracer is meant: the one named, or the only one plugged in; and opening it."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Annotated

import typer

from kneewise.errors import LinkError, UsageError
from kneewise.instrument.tracer import Tracer

# USB identity of the RP2 port of MicroPython (its published board definition, from memory).
USB_VENDOR = 0x2E8A
USB_PRODUCT = 0x0005

On = Annotated[
    str,
    typer.Option(
        "--on",
        metavar="TARGET",
        help="Tracer: a serial port, usb:SERIAL, tcp:HOST:PORT, emulator, "
        "emulator:SCENARIO.toml or replay:FILE. May be left out with one tracer plugged in.",
    ),
]
Record = Annotated[
    Path | None,
    typer.Option(
        "--record",
        metavar="FILE",
        help="Record all that goes over the link to a new file, for `kneewise wire FILE` "
        "and --on replay:FILE.",
    ),
]


@contextmanager
def opened(on: str, record: Path | None = None, *, stands_alone: bool = False) -> Iterator[Tracer]:
    """The tracer that is meant; people are told of a replay and of what became of a recording."""
    target = target_of(on)
    with Tracer.open(target, source_stands_alone=stands_alone, record=record) as tracer:
        if tracer.remark:
            typer.echo(tracer.remark, err=True)
        try:
            yield tracer
        finally:
            if tracer.recorder is not None:
                typer.echo(tracer.recorder.outcome(), err=True)


def target_of(named: str) -> str:
    """`named`, or the port of the only tracer plugged in. LinkError, UsageError."""
    if named:
        return named
    from serial.tools import list_ports

    ports = [
        port.device
        for port in list_ports.comports()
        if (port.vid, port.pid) == (USB_VENDOR, USB_PRODUCT)
    ]
    if len(ports) == 1:
        return str(ports[0])
    if ports:
        raise UsageError(
            "choosing a tracer",
            found=f"{len(ports)} boards plugged in: {', '.join(ports)}",
            expected="one",
            next_step="name one of them with --on",
        )
    raise LinkError(
        "choosing a tracer",
        found="no tracer plugged in",
        expected="one",
        next_step="plug it in, name its port with --on, or try --on emulator",
    )
