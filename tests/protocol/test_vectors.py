"""The golden vectors hold what an independent coder makes, and the codec agrees with them.

Whoever writes a firmware or a host of their own has these files to go by.
"""

from __future__ import annotations

import json
from typing import Any

import pytest
import wire_checks
import wire_golden

from kneewire import catalogue, framing, seam

NAMES = sorted(wire_golden.FILES)
CHECKED = sorted(wire_checks.CHECKS)


def stored(name: str) -> Any:
    return json.loads((wire_golden.VECTORS / name).read_text(encoding="ascii"))


def test_no_vector_file_is_without_its_maker() -> None:
    files = sorted(path.name for path in wire_golden.VECTORS.iterdir() if path.is_file())
    assert files == sorted([*NAMES, "conversations.json"])
    # The catalogue is for building the other side of a version; there is no codec in it.
    assert [name for name in NAMES if name != "catalogue.json"] == CHECKED


@pytest.mark.parametrize("name", NAMES)
def test_vectors_are_what_an_independent_coder_makes(name: str) -> None:
    assert stored(name) == json.loads(wire_golden.written(name)), (
        "after a deliberate change of the wire: python tests/protocol/wire_golden.py"
    )


def test_every_message_and_every_value_has_a_vector() -> None:
    golden = {row["name"]: row for row in stored("messages.json")["messages"]}
    assert set(golden) == set(catalogue.KINDS)
    for kind, (name, _, _, _, rows) in catalogue.MESSAGES.items():
        assert golden[name]["kind"] == kind
        assert set(golden[name]["values"]) == {field for field, _ in rows}


def test_framing_vectors_cover_every_reason_and_the_lengths_that_usb_packets_make() -> None:
    vectors = stored("framing.json")
    reasons = {item["bad"] for row in vectors["streams"] for item in row["items"] if "bad" in item}
    assert reasons == {
        framing.BAD_LONG,
        framing.BAD_ESCAPE,
        framing.BAD_COBS,
        framing.BAD_SHORT,
        framing.BAD_CRC,
    }
    for way in ("to_device", "to_host"):
        lengths = {len(row[way]) // 2 for row in vectors["frames"]}
        assert {63, 64, 65, 128} <= lengths


@pytest.mark.parametrize("coder", ["seam", "pure"])
@pytest.mark.parametrize("name", CHECKED)
def test_codec_agrees_with_vectors(name: str, coder: str, monkeypatch: pytest.MonkeyPatch) -> None:
    if coder == "pure":
        use_pure_coder(monkeypatch)
    else:
        assert framing.cobs_encode is not seam.pure_encode
    verdicts = list(wire_checks.CHECKS[name](stored(name)))
    assert verdicts
    assert [verdict for verdict in verdicts if verdict[1]] == []


def use_pure_coder(monkeypatch: pytest.MonkeyPatch) -> None:
    """What MicroPython runs: no `cobs` package."""
    monkeypatch.setattr(framing, "cobs_encode", seam.pure_encode)
    monkeypatch.setattr(framing, "run_decode", seam.pure_decode)


def test_both_coders_give_the_same_results_on_the_same_seeds(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    by_package = wire_checks.seed_crcs(100)
    use_pure_coder(monkeypatch)
    assert wire_checks.seed_crcs(100) == by_package
