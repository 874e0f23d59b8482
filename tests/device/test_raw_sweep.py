"""If these fail, the pairs that were asked for one by one are lost between the board and the host,
or a tracer measures with converters that it does not have."""

from __future__ import annotations

from array import array
from itertools import pairwise

import pytest
from charging import FINE
from fake_board import A_ZERO, V_ZERO, FakeBoard, hal, profile
from hosting import SWEEP_ID, Device, refusal, service_module
from test_service import INTERLOCK, NO_SWEEP, OUT_OF_RANGE

from kneewire import catalogue
from kneewire.messages import RAW_A_BLOCK
from kneewire.seam import crc32
from kneewise.emulator.firmware import firmware_module

READ = firmware_module("tracer.charge").READ_CONVERSIONS
MOST = catalogue.MAX_RAW_PAIRS


@pytest.fixture
def device(board, tmp_path):
    return Device(board, tmp_path)


def swept(device: Device, **asked: int) -> dict:
    """The manifest of a sweep that was armed so."""
    device.fire(device.arm(**asked)["token"])
    device.turns(ms=1)
    device.heard()
    return device.ask("read_manifest").values


def fetched(device: Device, first: int, count: int, a_block: int = 0) -> bytes:
    """As a host does: bursts, until all is there."""
    data = b""
    end = first + count
    while first < end:
        asked = {"sweep_id": SWEEP_ID, "first": first, "count": end - first, "a_block": a_block}
        *blocks, reply = device.say(device.frame("fetch_raw", asked))
        assert (reply.name, reply["first"]) == ("fetch_raw_reply", first)
        for block in blocks:
            assert (block.name, block["first"]) == ("raw_block", first)
            data += block["data"]
            first += len(block["data"]) // 4
        assert len(blocks) == -(-reply["count"] // (a_block or RAW_A_BLOCK))
    return data


@pytest.mark.clause("K3")
def test_the_manifest_has_the_readings_before_the_closing(device):
    manifest = swept(device)
    assert manifest["voltage_zero_sum"] == READ * V_ZERO
    assert manifest["zero_conversions"] == READ
    assert manifest["voltage_sum"] == READ * (V_ZERO + round(40 / 0.0165))
    assert manifest["current_sum"] == READ * A_ZERO
    assert manifest["conversions"] == READ
    assert manifest["bounces"] == 0


@pytest.mark.clause("K3")
def test_without_a_switch_the_manifest_tells_of_no_zero(board, tmp_path):
    manifest = swept(Device(board, tmp_path, zero_switch=0))
    assert (manifest["voltage_zero_sum"], manifest["zero_conversions"]) == (0, 0)


# -- raw pairs -----------------------------------------------------------------------------


@pytest.mark.parametrize(("from_us", "room"), [(0, 1), (0, 1500), (1000, 515), (3000, 61)])
@pytest.mark.clause("K5", "K6", "K7")
def test_raw_pairs_arrive_whole_and_are_those_that_the_knots_hold(device, from_us, room):
    manifest = swept(device, raw_from_us=from_us, raw_pairs=room, knots=512)
    assert (manifest["raw_first"], manifest["raw_pairs"]) == (from_us // 4, room)
    data = fetched(device, 0, room)
    assert (len(data), crc32(data)) == (4 * room, manifest["raw_crc"])
    pairs = array("I", data)
    assert all(b & 0xFFFF >= a & 0xFFFF for a, b in pairwise(pairs))
    if room == 1500:
        # A whole knot within the window has the same sum.
        capture = device.loop.capture
        cuts = device.loop.held._buffers.cuts
        size = capture.bin_pairs()
        last = size * cuts[1]
        block = device.say(
            device.frame("fetch", {"sweep_id": SWEEP_ID, "first": 0, "count": 1, "a_block": 0})
        )[0]
        sums = int.from_bytes(block["data"][8:14], "little")
        assert sums == sum(pair & 0xFFFF for pair in pairs[:last])


@pytest.mark.clause("K7")
def test_a_gap_of_raw_pairs_is_fetched_as_it_was_asked_for(device):
    swept(device, raw_pairs=700)
    whole = fetched(device, 0, 700)
    assert fetched(device, 123, 77) == whole[4 * 123 : 4 * 200]
    assert fetched(device, 699, 1) == whole[-4:]
    assert fetched(device, 0, 700, a_block=7) == whole


@pytest.mark.clause("K6")
def test_a_window_that_the_sweep_did_not_reach_is_told(device):
    manifest = swept(device, raw_from_us=50_000_000, raw_pairs=100)
    assert [manifest[name] for name in ("raw_first", "raw_pairs", "raw_crc")] == [0, 0, 0]
    asked = {"sweep_id": SWEEP_ID, "first": 0, "count": 1, "a_block": 0}
    assert refusal(device.ask("fetch_raw", asked)) == OUT_OF_RANGE


@pytest.mark.clause("K6")
def test_a_window_that_the_sweep_left_half_full_ends_with_it(device):
    whole = swept(device, raw_pairs=1)
    device.ask("acknowledge", {"sweep_id": SWEEP_ID})
    device.turns(lambda: device.state() == "safe")
    pairs = whole["pairs"]
    manifest = swept(device, raw_from_us=4 * (pairs - 100), raw_pairs=2000)
    assert manifest["raw_first"] == pairs - 100
    assert manifest["raw_pairs"] == manifest["pairs"] - manifest["raw_first"] < 2000
    data = fetched(device, 0, manifest["raw_pairs"])
    assert crc32(data) == manifest["raw_crc"]


@pytest.mark.parametrize(
    ("first", "count", "a_block"), [(50, 1, 0), (0, 0, 0), (0, 51, 0), (49, 2, 0), (0, 1, 255)]
)
@pytest.mark.clause("K7")
def test_raw_pairs_that_are_not_there_are_out_of_range(device, first, count, a_block):
    swept(device, raw_pairs=50)
    asked = {"sweep_id": SWEEP_ID, "first": first, "count": count, "a_block": a_block}
    assert refusal(device.ask("fetch_raw", asked)) == OUT_OF_RANGE


@pytest.mark.clause("K7")
def test_raw_pairs_of_another_sweep_are_not_given(device):
    asked = {"sweep_id": SWEEP_ID, "first": 0, "count": 1, "a_block": 0}
    assert refusal(device.ask("fetch_raw", asked)) == NO_SWEEP
    swept(device, raw_pairs=50)
    other = {**asked, "sweep_id": b"another sweep id"}
    assert refusal(device.ask("fetch_raw", other)) == NO_SWEEP
    device.ask("acknowledge", {"sweep_id": SWEEP_ID})
    assert refusal(device.ask("fetch_raw", asked)) == NO_SWEEP


@pytest.mark.parametrize(
    ("changes", "fine"),
    [
        ({"raw_pairs": MOST}, True),
        ({"raw_pairs": MOST + 1}, False),
        ({"raw_pairs": 1, "raw_from_us": 120_000_000}, True),
        ({"raw_pairs": 1, "raw_from_us": 120_000_001}, False),
    ],
)
@pytest.mark.clause("K5")
def test_no_longer_window_is_promised_than_there_is_room_for(device, changes, fine):
    answer = device.arm(**changes)
    assert answer.name == "arm_reply" if fine else refusal(answer) == OUT_OF_RANGE


@pytest.mark.clause("K5")
def test_where_memory_is_short_arming_is_refused_and_may_be_tried_with_less(device, monkeypatch):
    def short(count: int) -> bytearray:
        if count > 4000:
            raise MemoryError
        return bytearray(count)

    monkeypatch.setattr(service_module, "bytearray", short, raising=False)
    assert refusal(device.arm(raw_pairs=1001)) == OUT_OF_RANGE
    assert device.state() == "safe"
    assert device.arm(raw_pairs=1000).name == "arm_reply"


def test_what_one_sweep_took_is_given_back_before_the_next_arming(device):
    swept(device, raw_pairs=900)
    assert device.service.armed.raw is None
    assert len(device.loop.held._raw) == 3600
    device.ask("acknowledge", {"sweep_id": SWEEP_ID})
    assert device.loop.held._raw is None
    assert device.loop.capture.raw is None


# -- converters ----------------------------------------------------------------------------


def test_the_converters_of_the_profile_measure(board, tmp_path):
    device = Device(board, tmp_path, **FINE, pair_us=2)
    manifest = swept(device, raw_pairs=300)
    assert (manifest["pair_ns"], manifest["skew_ns"]) == (2000, 0)
    assert manifest["current_sum"] == READ * 16 * A_ZERO
    pairs = array("I", fetched(device, 0, 300))
    assert max(pair >> 16 for pair in pairs) > 4095


@pytest.mark.clause("W1")
def test_a_profile_whose_converters_the_board_has_not_is_as_good_as_none(tmp_path):
    """H14: nothing may close with a curve measured by who knows what."""
    board = FakeBoard()
    board.converters = {hal.INTERNAL}
    device = Device(board, tmp_path, **FINE)
    assert device.hello()["profile_crc"] == 0
    assert device.ask("read_profile")["record"] == b""
    answer = device.arm()
    assert (refusal(answer), answer["guard"]) == (INTERLOCK, 14)
    assert device.ask("status").name == "status_reply"
    device.turns(ms=500)
    assert board.closings == 0
    assert (board.relay_closed, board.bleed_engaged) == (False, True)


def test_a_converter_of_no_known_kind_is_as_good_as_none(board, tmp_path):
    device = Device(board, tmp_path, converter=9)
    assert profile(converter=9).finer == 1
    answer = device.arm()
    assert (refusal(answer), answer["guard"]) == (INTERLOCK, 14)


def test_a_second_ctrl_c_at_the_zero_leaves_the_voltage_measured_at_the_source(device):
    """Else the guards would see no voltage at a live source."""
    board = device.board
    presses = []

    def pressed(*values: int) -> int:
        presses.append(values)
        raise KeyboardInterrupt

    token = device.arm()["token"]
    device.fire(token)
    plain = board.zero_input

    def zero_input(on: bool) -> None:
        plain(on)
        if on:
            board.read = pressed
            board.pulse = pressed

    board.zero_input = zero_input
    with pytest.raises(KeyboardInterrupt):
        device.loop.run()
    assert len(presses) == 2
    assert not board.voltage_at_zero
