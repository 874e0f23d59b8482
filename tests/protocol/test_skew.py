"""If these fail, a host and a device of two versions damage each other instead of saying so."""

from __future__ import annotations

import json
import struct
from typing import Any

import pytest
import skew_device
import wire_checks
import wire_golden
from skew_device import SkewDevice, frozen, with_a_field_more

from kneewire import PROTOCOL, catalogue, framing
from kneewire.messages import NO_SESSION, fingerprint, pack, unpack
from kneewise.emulator.opener import connector, start
from kneewise.emulator.scenario import Scenario
from kneewise.errors import ProtocolError
from kneewise.link import refusals, session
from kneewise.link.session import Session

VERSIONS = sorted(path.name for path in wire_golden.VECTORS.iterdir() if path.is_dir())


def test_every_released_version_is_frozen() -> None:
    assert VERSIONS == ["0.1", "0.2"]


@pytest.mark.clause("V5")
def test_what_is_frozen_does_not_change_under_its_number() -> None:
    """A wire of another kind would go by the number of one that is out."""
    version = "{}.{}".format(*PROTOCOL)
    if version in VERSIONS:
        for file in wire_golden.FILES:
            held = (wire_golden.VECTORS / version / file).read_text(encoding="ascii")
            assert held == wire_golden.written(file), f"{version}/{file}: number the wire anew"


# -- what stays for ever ---------------------------------------------------------------------


@pytest.mark.clause("V1", "V5", "F1", "F2", "F3", "F4")
@pytest.mark.parametrize("file", ["cobs.json", "framing.json"])
@pytest.mark.parametrize("version", VERSIONS)
def test_the_framing_of_every_version_is_that_of_today(version: str, file: str) -> None:
    held = json.loads((wire_golden.VECTORS / version / file).read_text(encoding="ascii"))
    assert [verdict for verdict in wire_checks.CHECKS[file](held) if verdict[1]] == []


@pytest.mark.clause("V1", "H3")
@pytest.mark.parametrize("version", VERSIONS)
def test_the_frozen_messages_of_every_version_read_as_then(version: str) -> None:
    kinds = {row["name"]: row for row in frozen(version)["messages"]}
    path = wire_golden.VECTORS / version / "messages.json"
    for row in json.loads(path.read_text(encoding="ascii"))["messages"]:
        if not kinds[row["name"]]["frozen"]:
            continue
        message = unpack(bytes.fromhex(row["body"]))
        values = {
            name: value.hex() if isinstance(value, bytes) else value
            for name, value in message.values.items()
        }
        assert (message.name, values) == (row["name"], row["values"])


# -- this host, another device ---------------------------------------------------------------


def greeted(device: SkewDevice) -> Session:
    made = Session(device)
    made.hello()
    return made


def refusal_of(device: SkewDevice) -> ProtocolError:
    with pytest.raises(ProtocolError) as refused:
        greeted(device)
    assert set(device.asked) == {"hello"}, "something was asked of a device of another version"
    return refused.value


@pytest.mark.clause("V2", "V4")
def test_a_device_of_the_version_before_is_told() -> None:
    old = frozen("0.2")
    error = refusal_of(SkewDevice(old))
    assert error.found == (
        f"the device has protocol 0.2, catalogue {old['fingerprint']:08x} (firmware 0.0.0)"
    )
    assert error.expected == f"the host has protocol 0.3, catalogue {fingerprint():08x}"
    assert error.next_step.startswith("store the firmware that came with this host on the device")


@pytest.mark.clause("V2", "V4")
def test_another_catalogue_of_the_same_version_is_told() -> None:
    other = with_a_field_more(frozen("."))
    error = refusal_of(SkewDevice(other))
    assert error.found == (
        f"the device has protocol 0.3, catalogue {other['fingerprint']:08x} (firmware 0.0.0)"
    )
    assert error.expected == f"the host has protocol 0.3, catalogue {fingerprint():08x}"
    assert error.next_step == (
        "store the firmware that came with this host on the device, "
        "or install the host version that came with that firmware"
    )


@pytest.mark.clause("V3", "V4")
@pytest.mark.parametrize("version", [(1, 0), (0, 4), (3, 7)])
def test_another_version_is_told(version: tuple[int, int]) -> None:
    other = {**with_a_field_more(frozen("0.1")), "protocol": list(version)}
    error = refusal_of(SkewDevice(other))
    assert f"the device has protocol {version[0]}.{version[1]}," in error.found


@pytest.mark.clause("V2", "B2")
def test_the_same_catalogue_talks_whatever_stands_behind_its_fields() -> None:
    made = greeted(SkewDevice(frozen("."), extra=b"later"))  # the catalogue of today
    assert made.session == skew_device.SESSION
    assert made.request("status")["state"] == 0


@pytest.mark.clause("V3", "B2")
@pytest.mark.parametrize("minor", [0, 1, 8])
def test_from_1_0_on_any_minor_of_the_same_major_talks(
    minor: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    for module in (session, refusals):
        monkeypatch.setattr(module, "PROTOCOL", (1, 4))
    other = {**with_a_field_more(frozen(".")), "protocol": [1, minor]}
    made = greeted(SkewDevice(other, extra=b"\x07"))
    assert made.request("status")["state"] == 0


# -- another host, this device ---------------------------------------------------------------


class OldHost:
    """Frames by hand to the firmware on the in-process rung."""

    def __init__(self) -> None:
        self._emulated = start(Scenario.default(), "in-process")
        self._port = connector(self._emulated)()
        self._decoder = framing.Decoder(4096, toward_device=False)

    def say(self, body: bytes) -> Any:
        self._port.write(framing.GUARD + framing.encode(body, toward_device=True))
        (item,) = self._decoder.feed(self._port.read(1.0))
        return unpack(item)

    def close(self) -> None:
        self._emulated.close()


@pytest.fixture
def old_host():
    made = OldHost()
    yield made
    made.close()


def hello(major: int, minor: int, of: int) -> bytes:
    values = {"host_nonce": 5, "fingerprint": of, "major": major, "minor": minor}
    return pack("hello", NO_SESSION, session.HELLO_SEQUENCE, values)


@pytest.mark.clause("V1", "V2", "H1", "H3")
def test_a_host_of_the_version_before_learns_what_the_device_has(old_host) -> None:
    """It refuses by itself; until then the device does nothing for it that it could misread."""
    reply = old_host.say(hello(0, 1, frozen("0.1")["fingerprint"]))
    assert (reply["major"], reply["minor"], reply["fingerprint"]) == (*PROTOCOL, fingerprint())
    short = struct.pack("<HIB", 96, 1000, 1)  # what arm was in 0.1
    head = bytes([catalogue.KINDS["arm"]]) + struct.pack("<II", reply["session"], 1)
    refusal = old_host.say(head + short)
    assert catalogue.REFUSALS[refusal["code"]] == "malformed"


@pytest.mark.clause("V1", "H1", "H3")
@pytest.mark.parametrize("version", [(0, 1), (0, 3), (1, 0), (255, 255)])
def test_the_device_answers_the_hello_of_any_version_with_its_own(old_host, version) -> None:
    reply = old_host.say(hello(*version, 0x80808080))
    assert reply.name == "hello_reply"
    assert (reply["major"], reply["minor"], reply["fingerprint"]) == (*PROTOCOL, fingerprint())


@pytest.mark.clause("B5", "B2", "B4")
def test_the_device_refuses_what_is_later_than_it_and_stays(old_host) -> None:
    reply = old_host.say(hello(0, 9, 0x80808080) + b"a later field")
    header = reply["session"].to_bytes(4, "little")
    for kind in sorted(set(range(0x80)) - set(catalogue.MESSAGES)):
        refusal = old_host.say(bytes([kind]) + header + bytes(4) + b"anything")
        assert (refusal.name, refusal["of_kind"]) == ("refusal", kind)
        assert catalogue.REFUSALS[refusal["code"]] == "unknown kind"
    status = pack("status", reply["session"], 1)
    assert old_host.say(status + b"a later field").name == "status_reply"
