"""The finished sweep, held until the host has it: knots as wire records, and its manifest."""

from kneewire.catalogue import MAX_FRAME
from kneewire.framing import CRC_BYTES
from kneewire.messages import KNOT_BYTES, pack
from kneewire.seam import crc32
from tracer import coder
from tracer import knots as placing
from tracer.memory import MAX_FRAME as FRAME_BYTES
from tracer.memory import RECORD_BYTES

NO_ID = bytes(16)

if (RECORD_BYTES, FRAME_BYTES) != (KNOT_BYTES, MAX_FRAME):
    raise ValueError("memory.py and the catalogue disagree")


class Held:
    """One sweep at most, in the buffer for its records."""

    def __init__(self, buffers, cobs_into=None):
        self._buffers = buffers
        self._cobs_into = cobs_into or coder.cobs_into
        self.count = 0
        self.sweep_id = NO_ID
        self.manifest = {}

    def present(self):
        return self.sweep_id != NO_ID

    def drop(self):
        self.sweep_id = NO_ID
        self.count = 0
        self.manifest = {}

    def keep(self, sweep_id, knots, result, capture, hal, profile):
        """Place the knots of a finished charge and write its manifest."""
        pair_us = hal.PAIR_US
        conducting_us = result.capture_us + pair_us * capture.skipped
        self.count = placing.place(
            capture,
            knots,
            profile["voltage_zero_x16"],
            16 * result.current_sum // result.conversions,
            conducting_us,
            pair_us,
            self._buffers,
        )
        self.manifest = {
            "sweep_id": sweep_id,
            "end_reason": result.end_reason,
            "knots": self.count,
            "pairs": capture.pairs(),
            "knots_crc": crc32(memoryview(self._buffers.records)[: self.count * KNOT_BYTES]),
            "ring_overruns": capture.overruns,
            "conversions_lost": 1 if result.conversions_lost else 0,
            "conducting_us": conducting_us,
            "opened_us": result.opened_us,
            "pair_ns": 1000 * pair_us,
            "skew_ns": hal.SKEW_NS,
            "bin_pairs": capture.bin_pairs(),
            "voltage_sum": result.voltage_sum,
            "current_sum": result.current_sum,
            "conversions": result.conversions,
            "residual_sum": 0,
            "residual_conversions": 0,
            "profile_crc": profile.crc,
        }
        self.sweep_id = sweep_id  # last: from here on it is there, whole

    def block(self, session, sequence, first, count):
        """The frame of one block, of `count` knots from `first` on; good until the next call."""
        body = self._buffers.body
        head = pack("block", session, sequence, {"first": first, "data": b""})
        place = len(head)
        body[:place] = head
        body[place - 1] = count
        after = place + count * KNOT_BYTES
        records = memoryview(self._buffers.records)
        body[place:after] = records[first * KNOT_BYTES : (first + count) * KNOT_BYTES]
        crc = crc32(memoryview(body)[:after])
        body[after : after + CRC_BYTES] = crc.to_bytes(CRC_BYTES, "little")
        coded = self._buffers.coded
        return memoryview(coded)[: self._cobs_into(body, after + CRC_BYTES, coded)]
