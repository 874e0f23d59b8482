"""Which tracer is meant: the one named, or the only one plugged in."""

from __future__ import annotations

from typing import Annotated

import typer

from kneewise.errors import LinkError, UsageError

# USB identity of the RP2 port of MicroPython (its published board definition, from memory).
USB_VENDOR = 0x2E8A
USB_PRODUCT = 0x0005

On = Annotated[
    str,
    typer.Option(
        "--on",
        metavar="TARGET",
        help="Tracer: a serial port, usb:SERIAL, tcp:HOST:PORT, emulator or "
        "emulator:SCENARIO.toml. May be left out with one tracer plugged in.",
    ),
]


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
