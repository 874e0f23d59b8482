"""If these fail, host and firmware no longer say what the published conversations show."""

from __future__ import annotations

import json
from typing import Any

import conversations
import pytest
import wire_coder

STORED = json.loads(conversations.FILE.read_text(encoding="utf-8"))["conversations"]


def test_the_file_is_what_host_and_firmware_say_today() -> None:
    assert conversations.FILE.read_text(encoding="utf-8") == conversations.written()


def coded_anew(row: dict[str, Any]) -> bytes:
    """The row's bytes from its messages alone, by the vectors' own coder."""
    out = b""
    for message in row["messages"]:
        if "text" in message:
            return b""
        rows = dict(wire_coder.ROWS[message["message"]])
        values = {
            name: bytes.fromhex(value) if isinstance(value, str) and rows[name] != "text" else value
            for name, value in message["values"].items()
        }
        body = wire_coder.body(message["message"], message["session"], message["sequence"], values)
        guard = b"#\x00" if row["to"] == "device" else b""
        out += guard + wire_coder.frame(body, row["to"] == "device")
    return out


@pytest.mark.parametrize("name", STORED)
def test_every_frame_is_that_of_the_golden_coder(name: str) -> None:
    whole = [row for row in STORED[name] if not any("text" in said for said in row["messages"])]
    assert len(whole) >= 10
    for row in whole:
        assert coded_anew(row).hex() == row["bytes"]


@pytest.mark.parametrize("name", STORED)
def test_no_conversation_fires_twice(name: str) -> None:
    fires = [
        said["sequence"]
        for row in STORED[name]
        for said in row["messages"]
        if said.get("message") == "fire"
    ]
    assert len(set(fires)) == 1
