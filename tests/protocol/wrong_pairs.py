"""Devices that break one clause of K each: knots and raw pairs that are not what was measured.

They join `WRONG_DEVICES` of wrong_devices.py.
"""

from __future__ import annotations

import struct
from collections.abc import Callable
from typing import Any

import pytest
from wrong_devices import breaks, handler, replies

from kneewire import catalogue, framing
from kneewire.messages import KNOT_BYTES, RAW_BYTES, pack
from kneewise.emulator.firmware import firmware_module

Patch = pytest.MonkeyPatch

held = firmware_module("tracer.held")
records = firmware_module("tracer.records")
capture = firmware_module("tracer.capture")
TIME, SCATTER = 0, 24  # places in a knot record


def records_with(patch: Patch, change: Callable[[bytearray], object]) -> None:
    """Each knot record goes through `change` before anybody sees it, the manifest's CRC too."""
    original = records.write

    def write(bins: Any, cuts: Any, out: bytearray, r: Any) -> None:
        original(bins, cuts, out, r)
        for number in range(r[records.R_COUNT]):
            place = r[records.R_OUT] + number * KNOT_BYTES
            record = bytearray(out[place : place + KNOT_BYTES])
            change(record)
            out[place : place + KNOT_BYTES] = record

    patch.setattr(records, "write", write)


def raw_blocks_with(patch: Patch, change: Callable[[Any, int, int], tuple[int, bytes]]) -> None:
    """Blocks of raw pairs hold what change(held, first, count) gives: the first, and the data."""

    def raw_block(self: Any, session: int, sequence: int, first: int, count: int) -> bytes:
        place, data = change(self, first, count)
        body = pack("raw_block", session, sequence, {"first": place, "data": data})
        return framing.encode(body, False)

    patch.setattr(held.Held, "raw_block", raw_block)


@breaks("K1")
def stamps_the_beginning_of_a_knot(patch: Patch) -> None:
    def earlier(record: bytearray) -> None:
        (time_us,) = struct.unpack_from("<Q", record, TIME)
        struct.pack_into("<Q", record, TIME, time_us - 9)

    records_with(patch, earlier)


@breaks("K1", "W10")
def counts_its_last_pairs_twice(patch: Patch) -> None:
    replies(patch, "read_manifest", pairs=lambda self, reply: reply["pairs"] + 1)


@breaks("K2")
def scatters_by_first_differences(patch: Patch) -> None:
    """About a third of it, as noise makes them."""

    def thirds(record: bytearray) -> None:
        voltage, current = struct.unpack_from("<QQ", record, SCATTER)
        struct.pack_into("<QQ", record, SCATTER, voltage // 3, current // 3)

    records_with(patch, thirds)


@breaks("K3")
def reads_no_zero(patch: Patch) -> None:
    replies(patch, "read_manifest", voltage_zero_sum=0, zero_conversions=0)


@breaks("K4")
def bounces_without_any_time_for_it(patch: Patch) -> None:
    replies(patch, "read_manifest", bounces=2)


@breaks("B7", "K5")
def arms_for_more_raw_pairs_than_there_are(patch: Patch) -> None:
    def arm(original: Any, self: Any, request: Any) -> Any:
        request.values["raw_pairs"] = min(request["raw_pairs"], catalogue.MAX_RAW_PAIRS)
        return original(self, request)

    handler(patch, "arm", arm)


@breaks("K6")
def keeps_fewer_raw_pairs_than_it_was_asked_for(patch: Patch) -> None:
    original = capture.Capture.raw_pairs
    patch.setattr(capture.Capture, "raw_pairs", lambda self: max(original(self) - 1, 0))


@breaks("K6")
def has_a_wrong_crc_of_its_raw_pairs(patch: Patch) -> None:
    replies(patch, "read_manifest", raw_crc=7)


@breaks("K6")
def tells_of_raw_pairs_that_nobody_asked_for(patch: Patch) -> None:
    def first(self: Any, reply: Any) -> Any:
        return reply["raw_first"] if reply["raw_pairs"] else 5

    replies(patch, "read_manifest", raw_first=first)


@breaks("K1", "K2", "K6")
def sends_current_before_voltage(patch: Patch) -> None:
    def swapped(self: Any, first: int, count: int) -> tuple[int, bytes]:
        data = bytes(self._raw_bytes(first, count))
        pairs = (data[place : place + RAW_BYTES] for place in range(0, len(data), RAW_BYTES))
        return first, b"".join(pair[2:] + pair[:2] for pair in pairs)

    raw_blocks_with(patch, swapped)


@breaks("K7")
def sends_raw_pairs_beyond_the_count(patch: Patch) -> None:
    def longer(self: Any, first: int, count: int) -> tuple[int, bytes]:
        data = bytes(self._raw_bytes(first, count))
        return first, data + bytes(RAW_BYTES) * (first + count == self.raw_count)

    raw_blocks_with(patch, longer)


@breaks("K7")
def gives_the_raw_pairs_of_any_sweep(patch: Patch) -> None:
    def fetch_raw(original: Any, self: Any, request: Any) -> Any:
        request.values["sweep_id"] = self.held.sweep_id
        return original(self, request)

    handler(patch, "fetch_raw", fetch_raw)


@breaks("B7", "K7")
def ends_its_raw_pairs_in_silence(patch: Patch) -> None:
    """A fetch beyond them gets what there is, in place of a refusal."""

    def fetch_raw(original: Any, self: Any, request: Any) -> Any:
        there = self.held.raw_count
        if request["first"] < there and request["count"] > there - request["first"]:
            request.values["count"] = there - request["first"]
        return original(self, request)

    handler(patch, "fetch_raw", fetch_raw)
