"""The finished sweep, held until the host has it: knots as wire records, and its manifest."""

from kneewire.messages import KNOT_BYTES
from kneewire.seam import crc32
from tracer import knots as placing
from tracer.memory import RECORD_BYTES

NO_ID = bytes(16)

if RECORD_BYTES != KNOT_BYTES:
    raise ValueError("memory.py and the catalogue disagree")


class Held:
    """One sweep at most, in the buffer for its records."""

    def __init__(self, buffers):
        self._buffers = buffers
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
        self.sweep_id = sweep_id
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

    def knots_between(self, first, count):
        """The records of `count` knots."""
        return bytes(
            memoryview(self._buffers.records)[first * KNOT_BYTES : (first + count) * KNOT_BYTES]
        )
