"""If these fail, a user who stands at the roof with a dead link is not told what to do next.

Every error of the link: what was asked, what came, what was expected, what to do.
"""

from __future__ import annotations

import errno
from typing import Any

import pytest
import serial
from scripted import HELLO, ScriptedPort, reply

from kneewire import catalogue, framing
from kneewire.hazards import HAZARDS
from kneewire.messages import Message, pack
from kneewise.errors import KneewiseError, LinkError, ProtocolError, RefusedError, UsageError
from kneewise.instrument.opened import Opened
from kneewise.instrument.sweep import TRIES, fetch
from kneewise.instrument.tracer import Tracer
from kneewise.link import port as ports
from kneewise.link.port import SerialPort, open_port
from kneewise.link.refusals import hazard_text
from kneewise.link.session import Session

CHARGED = "the capacitor may hold charge"


def parts(error: KneewiseError) -> tuple[str, str, str, str]:
    return error.what, error.found, error.expected, error.next_step


# -- ports -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("number", "found", "step"),
    [
        (errno.ENOENT, "no such port", "plug the tracer in and name its port with --on"),
        (errno.EBUSY, "in use by another program", "close that program, then try again"),
        (errno.EACCES, "no permission", "join the group that owns the port"),
        (errno.ECONNREFUSED, "nothing listens", "start it there, or name another target"),
        (errno.ENOTTY, "boom", "name a serial port with --on"),
    ],
)
def test_a_port_that_cannot_be_opened(number, found, step, monkeypatch) -> None:
    def fails(*_: Any, **__: Any) -> None:
        raise serial.SerialException(number, "boom")

    monkeypatch.setattr(serial, "serial_for_url", fails)
    with pytest.raises(LinkError) as caught:
        open_port("/dev/somewhere")
    what, told, expected, next_step = parts(caught.value)
    assert (what, expected) == ("opening /dev/somewhere", "a free serial port")
    assert found in told
    assert step in next_step


@pytest.mark.parametrize("target", ["tcp:nowhere", "tcp::12", "tcp:host:port"])
def test_an_address_without_host_and_port(target: str) -> None:
    with pytest.raises(UsageError) as caught:
        open_port(target)
    assert parts(caught.value) == (
        f"opening {target}",
        "no host and port in it",
        "tcp:host:port, for example tcp:localhost:5331",
        "name the target with --on",
    )


def test_a_serial_number_that_is_not_plugged_in(monkeypatch) -> None:
    monkeypatch.setattr(ports.list_ports, "comports", list)
    with pytest.raises(LinkError) as caught:
        open_port("usb:E66")
    assert parts(caught.value) == (
        "opening usb:E66",
        "USB serial numbers none",
        "E66",
        "plug the tracer in, or name its port with --on",
    )


class Gone:
    timeout = 0.0
    in_waiting = 0

    def read(self, count: int) -> bytes:
        raise OSError("device not configured")

    def write(self, data: bytes) -> int:
        raise OSError("device not configured")


@pytest.mark.parametrize("act", ["read", "write"])
def test_a_port_that_goes_away(act: str) -> None:
    made = SerialPort("/dev/somewhere", Gone())
    with pytest.raises(LinkError) as caught:
        getattr(made, act)(b"x" if act == "write" else 0.1)
    what, found, expected, step = parts(caught.value)
    assert what == "talking to /dev/somewhere"
    assert found == "the port is gone (device not configured)"
    assert expected == "an open port"
    assert step == f"check the cable and the tracer's power; {CHARGED}"


# -- what answers, and what does not -----------------------------------------------------------


def silent_error(out: bytes, hello: dict[str, Any] | None = None) -> KneewiseError:
    port = ScriptedPort()
    port.hello = hello

    port.write = lambda data: setattr(port, "out", out)  # type: ignore[method-assign]
    with pytest.raises(KneewiseError) as caught:
        Session(port).hello()
    return caught.value


def test_silence() -> None:
    error = silent_error(b"")
    assert isinstance(error, LinkError)
    what, found, expected, step = parts(error)
    assert what == "asking scripted for hello"
    assert found.startswith("no answer in 3 s (")
    assert "sent again" in found
    assert expected == "a reply"
    assert step == (
        "check that this is the tracer's port and that the tracer has power; " + CHARGED
    )


def test_damaged_frames_and_nothing_else() -> None:
    error = silent_error(b"\x07\x81\x82\x00")
    assert isinstance(error, LinkError)
    assert "bad" in error.found


@pytest.mark.clause("R2")
def test_a_prompt_without_firmware() -> None:
    error = silent_error(
        b"Traceback (most recent call last):\r\n"
        b'  File "<stdin>", line 1, in <module>\r\n'
        b"ImportError: no module named 'tracer'\r\n>>> "
    )
    assert isinstance(error, ProtocolError)
    what, found, expected, step = parts(error)
    assert what == "asking scripted for hello"
    assert found.startswith("a MicroPython prompt, and no firmware that could be started from it")
    assert expected == "the Kneewise firmware"
    assert step.startswith("reset the board to start the firmware; if the prompt comes back")


@pytest.mark.clause("R2")
def test_a_firmware_that_ends_in_a_traceback_each_time() -> None:
    error = silent_error(
        b"Traceback (most recent call last):\r\n"
        b'  File "/tracer/app.py", line 9, in main\r\n'
        b"OSError: [Errno 5] EIO\r\n>>> "
    )
    assert isinstance(error, ProtocolError)
    assert error.found == (
        'a traceback: File "/tracer/app.py", line 9, in main, OSError: [Errno 5] EIO'
    )
    assert error.next_step.startswith("reset the board; if it happens again")


@pytest.mark.clause("V4")
def test_another_version() -> None:
    port = ScriptedPort()
    port.hello = {**HELLO, "major": 2, "minor": 3, "fingerprint": 0xABCDEF80}
    with pytest.raises(ProtocolError) as caught:
        Session(port).hello()
    assert "protocol 2.3, catalogue abcdef80 (firmware 0.1.0)" in caught.value.found
    assert "the host has protocol" in caught.value.expected
    assert caught.value.next_step.startswith("store the firmware that came with this host")


@pytest.mark.parametrize("changes", [{"window": 0}, {"max_frame": 63}])
def test_limits_that_cannot_be(changes: dict[str, int]) -> None:
    port = ScriptedPort()
    port.hello = {**HELLO, **changes}
    with pytest.raises(ProtocolError) as caught:
        Session(port).hello()
    assert caught.value.expected == "at least 1 block, and frames of at least 64 bytes"
    assert caught.value.next_step == "store the firmware that came with this host on the device"


# -- refusals --------------------------------------------------------------------------------


def refused_with(code: int, **finding: int) -> RefusedError:
    def answer(message: Message) -> bytes:
        kind = catalogue.KINDS[message.name]
        values = {"of_kind": kind, "code": code, "guard": 0, "measured": 0, "limit": 0, "unit": 0}
        values |= finding
        body = pack("refusal", message.session, message.sequence, values)
        return framing.encode(body, False)

    session = Session(ScriptedPort(answer))
    session.hello()
    with pytest.raises(RefusedError) as caught:
        session.request("status")
    return caught.value


@pytest.mark.parametrize("code", catalogue.REFUSALS)
def test_every_refusal_says_what_and_what_next(code: int) -> None:
    error = refused_with(code)
    assert error.what == "status was refused"
    assert error.found == catalogue.REFUSALS[code]
    assert error.expected == "a request that can be granted now"
    assert error.next_step or catalogue.REFUSALS[code] == "interlock"


@pytest.mark.clause("B7")
def test_a_refusal_that_this_host_does_not_know_is_told_by_its_number() -> None:
    assert refused_with(200).found == "code 200"


@pytest.mark.parametrize("guard", HAZARDS)
def test_every_guard_says_what_was_found_and_expected(guard: int) -> None:
    error = refused_with(8, guard=guard, measured=61_500, limit=60_000, unit=1)
    name, wrong, step = HAZARDS[guard]
    assert error.guard == guard
    assert error.found == f"H{guard} {name}: {wrong}, 61.500 V"
    assert error.expected == "at most 60.000 V"
    assert error.next_step == step


# -- a sweep ---------------------------------------------------------------------------------


def test_blocks_that_never_come() -> None:
    session = Session(ScriptedPort())
    session.hello()
    values = {"sweep_id": bytes(range(16)), "knots": 96, "knots_crc": 0}
    with pytest.raises(LinkError) as caught:
        fetch(session, Message("manifest", 1, 1, values))
    what, found, expected, step = parts(caught.value)
    assert what == "fetching sweep 00010203"
    assert found.startswith(f"96 of 96 knots missing, and nothing in the last {TRIES} bursts (")
    assert expected == "all knots, with the CRC of the manifest"
    assert step.startswith("use a shorter or better cable, then sweep again")


def test_a_tracer_whose_profile_cannot_be_read() -> None:
    def answer(message: Message) -> bytes:
        return reply(message, {"record": b"\x09nonsense"})

    opened = Opened(connect=lambda: ScriptedPort(answer), close=lambda: None, rung="tracer")
    with pytest.raises(KneewiseError) as caught:
        Tracer(opened)
    assert caught.value.what == "reading the device's profile"
    assert caught.value.next_step.startswith("store the profile of this board")


@pytest.mark.parametrize(
    ("finding", "expected"),
    [
        ((4, 61000, 60000, 1), "at most 60.000 V"),
        ((15, 1330, 1540, 7), "at least 1540 nF"),
        ((15, 3000, 2860, 7), "at most 2860 nF"),
        ((10, 40000, 70000, 6), "at least 70000 mohm"),
        ((11, -40, 24, 5), "within 24 codes"),
        ((11, -5000, 3600, 1), "within 3.600 V"),
        ((5, 0, 0, 0), "the guard satisfied"),
    ],
)
def test_a_limit_is_told_from_its_own_side(
    finding: tuple[int, int, int, int], expected: str
) -> None:
    assert hazard_text(*finding)[1] == expected
