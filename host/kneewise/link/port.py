"""Ports: where bytes come from and go to. No message is known here.

A port is a serial device, a pty (the same thing), a TCP address or an emulator's in-process
link. All offer `Port`; `open_port` opens the first three through pyserial.
"""

from __future__ import annotations

import errno
import time
from typing import Protocol

import serial
from serial.tools import list_ports

from kneewise.errors import LinkError, UsageError

READ_BYTES = 4096


class Port(Protocol):
    """What a session needs of a port."""

    name: str

    def clock(self) -> float:
        """Seconds; the clock that deadlines on this port are kept by."""

    def sleep(self, seconds: float) -> None:
        """Let time pass by that clock; what arrives meanwhile is kept."""

    def read(self, timeout_s: float) -> bytes:
        """Bytes that have arrived, b"" when none came in time. LinkError when the port is gone."""

    def write(self, data: bytes) -> None:
        """Write all. LinkError when the port is gone or stuck."""

    def close(self) -> None:
        """Close; twice is harmless."""


class SerialPort:
    """A port through pyserial."""

    def __init__(self, name: str, device: serial.SerialBase) -> None:
        self.name = name
        self._device = device

    def clock(self) -> float:
        return time.monotonic()

    def sleep(self, seconds: float) -> None:
        time.sleep(seconds)

    def read(self, timeout_s: float) -> bytes:
        try:
            self._device.timeout = max(timeout_s, 0.0)
            data: bytes = self._device.read(1)
            waiting = self._device.in_waiting if data else 0
            if waiting:
                data += self._device.read(min(waiting, READ_BYTES))
        except (OSError, TypeError, AttributeError) as error:
            raise self._gone(error) from error
        return data

    def write(self, data: bytes) -> None:
        try:
            self._device.write(data)
        except (OSError, TypeError, AttributeError) as error:
            raise self._gone(error) from error

    def close(self) -> None:
        self._device.close()

    def _gone(self, error: Exception) -> LinkError:
        return LinkError(
            f"talking to {self.name}",
            found=f"the port is gone ({error})",
            expected="an open port",
            next_step="check the cable and the tracer's power; the capacitor may hold charge",
        )


def open_port(target: str) -> SerialPort:
    """Open "/dev/ttyACM0", "COM5", "usb:SERIAL" or "tcp:host:port", for this process alone.

    Raises LinkError where the port is absent, busy or not allowed, UsageError where the target
    has no such form.
    """
    name = _serial_name(target)
    try:
        device = serial.serial_for_url(
            name,
            baudrate=115200,
            timeout=0,
            write_timeout=2.0,
            **({} if "://" in name else {"exclusive": True}),
        )
    except ValueError as error:
        raise UsageError(
            f"opening {target}",
            found=str(error),
            expected="a serial port, usb:SERIAL, tcp:host:port, emulator or emulator:FILE.toml",
            next_step="name the target with --on",
        ) from error
    except OSError as error:
        raise _not_opened(target, error) from error
    return SerialPort(target, device)


def _serial_name(target: str) -> str:
    if target.startswith("tcp:"):
        host, _, number = target[4:].rpartition(":")
        if not host or not number.isdigit():
            raise UsageError(
                f"opening {target}",
                found="no host and port in it",
                expected="tcp:host:port, for example tcp:localhost:5331",
                next_step="name the target with --on",
            )
        return f"socket://{host}:{number}"
    if target.startswith("usb:"):
        wanted = target[4:]
        known = {str(port.serial_number): str(port.device) for port in list_ports.comports()}
        if wanted not in known:
            listed = ", ".join(sorted(serial_number for serial_number in known if serial_number))
            raise LinkError(
                f"opening {target}",
                found=f"USB serial numbers {listed or 'none'}",
                expected=wanted,
                next_step="plug the tracer in, or name its port with --on",
            )
        return known[wanted]
    return target


def _not_opened(target: str, error: OSError) -> LinkError:
    number = error.errno
    text = str(error)
    if number in (errno.ENOENT, errno.ENXIO, errno.ENODEV, errno.EIO) or "FileNotFound" in text:
        found, step = "no such port", "plug the tracer in and name its port with --on"
    elif number in (errno.EBUSY, errno.EAGAIN) or "lock" in text or "PermissionError" in text:
        found, step = "the port is in use by another program", "close that program, then try again"
    elif number in (errno.EACCES, errno.EPERM):
        found = "no permission to open the port"
        step = "join the group that owns the port (often dialout), log in anew, then try again"
    elif number in (errno.ECONNREFUSED, errno.ETIMEDOUT) or "socket" in text:
        found, step = "nothing listens at that address", "start it there, or name another target"
    else:
        found, step = text, "name a serial port with --on"
    return LinkError(
        f"opening {target}", found=found, expected="a free serial port", next_step=step
    )
