"""The finished sweep, held until the host has it: its bins, its knots' places, its manifest.

Knot records are written from the bins each time that they are asked for.
"""

from kneewire.catalogue import MAX_FRAME
from kneewire.framing import CRC_BYTES
from kneewire.messages import KNOT_BYTES, KNOTS_A_BLOCK, RAW_BYTES, pack
from kneewire.seam import crc32
from tracer import coder, records
from tracer.knots import Placer
from tracer.memory import MAX_FRAME as FRAME_BYTES

NO_ID = bytes(16)
LEAST_RISE_CODES = 128  # of the capacitor's channel: its noise and offset are then below 1 %

if (records.RECORD_BYTES, FRAME_BYTES) != (KNOT_BYTES, MAX_FRAME):
    raise ValueError("memory.py or records.py and the catalogue disagree")


class Held:
    """One sweep at most. `work`: words that nobody needs between two captures."""

    def __init__(self, buffers, work, cobs_into=None, errors=None):
        self._buffers = buffers
        self._placer = Placer(work, buffers, errors)
        self._cobs_into = cobs_into or coder.cobs_into
        self._raw = None
        # All of them here: in the quiet no attribute can be added.
        self._knots = 0
        self._capture = None
        self._profile = None
        self._result = None
        self._bins = None
        self._folded = False
        self.count = 0
        self.raw_count = 0
        self.sweep_id = NO_ID
        self.manifest = {}

    def present(self):
        return self.sweep_id != NO_ID

    def drop(self):
        self.sweep_id = NO_ID
        self.count = 0
        self.raw_count = 0
        self._raw = None
        self.manifest = {}

    def prepare(self, knots, capture, profile):
        """Say what the sweep to come is to be held with."""
        self._knots = knots
        self._capture = capture
        self._profile = profile

    def begin(self, result):
        """A charge has ended: from here on `step` folds what is left and places the knots.

        Neither allocates.
        """
        self._result = result
        self._folded = False

    def step(self):
        """True once the knots are placed."""
        if not self._folded:
            self._folded = True
            self._fold()
            return False
        return self._placer.step()

    def _fold(self):
        result = self._result
        capture = self._capture
        capture.finish(result.pairs_written)
        voltage_zero_x16 = self._profile["voltage_zero_x16"]
        if result.zero_conversions:
            voltage_zero_x16 = result.voltage_zero_sum // (result.zero_conversions // 16)
        current_zero_x16 = result.current_sum // (result.conversions // 16)
        self._placer.begin(capture, self._knots, voltage_zero_x16, current_zero_x16)

    def keep(self, sweep_id, hal):
        """Finish what `begin` began and write the manifest."""
        while not self.step():
            pass
        result = self._result
        capture = self._capture
        profile = self._profile
        pair_us = hal.PAIR_US
        conducting_us = result.capture_us + pair_us * capture.skipped
        self.count = self._placer.count
        self._bins = capture.bins
        records.describe(self._buffers.placing, capture, self.count, conducting_us, pair_us)
        self._raw = capture.raw
        self.raw_count = capture.raw_pairs()
        capture.raw = None
        self.manifest = {
            "sweep_id": sweep_id,
            "end_reason": result.end_reason,
            "knots": self.count,
            "pairs": capture.pairs(),
            "knots_crc": None,  # see `whole_manifest`
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
            "voltage_zero_sum": result.voltage_zero_sum,
            "zero_conversions": result.zero_conversions,
            "bounces": capture.bounces,
            "raw_first": capture.raw_first if self.raw_count else 0,
            "raw_pairs": self.raw_count,
            "raw_crc": crc32(self._raw_bytes(0, self.raw_count)),
            "capacitor_before_sum": result.capacitor_before_sum,
            "capacitor_full_sum": result.capacitor_full_sum,
            "capacitor_conversions": result.capacitor_conversions,
            "opening_code": max(result.opening_x16, 0) // 16,
            "hot_opening": 1 if result.hot else 0,
            "bleed_tau_us": 0,
        }
        self.sweep_id = sweep_id  # last: from here on it is there, whole

    def capacitance_nf(self, result):
        """From the charge that went in and the voltage that it brought; 0 where that is not known:
        too small a rise, a bounce that took its share, a reader that was overtaken, an opening
        under load.
        """
        capture = self._capture
        profile = self._profile
        conversions = result.capacitor_conversions
        if not (result.conducted and conversions) or capture.bounces or capture.overruns:
            return 0
        if result.hot:  # a relay charges on while it lets go
            return 0
        rise = result.capacitor_full_sum - result.capacitor_before_sum
        rise_uv = rise * profile["capacitor_nv_per_code"] // (1000 * conversions)
        if rise_uv < LEAST_RISE_CODES * profile["capacitor_nv_per_code"] // 1000:
            return 0
        codes = records.current_sum(self._buffers.placing, self._bins, capture)
        codes -= result.current_sum * capture.pairs() // result.conversions
        # nA x us over uV is nF.
        charge = codes * profile["current_na_per_code"] * (self.manifest["pair_ns"] // 1000)
        return max(charge, 0) // rise_uv

    def whole_manifest(self):
        """The manifest, with the CRC over all knots, which takes its time and is made only now."""
        if self.manifest["knots_crc"] is None:
            self.manifest["knots_crc"] = self._knots_crc()
        return self.manifest

    def _knots_crc(self):
        crc = 0
        for piece in self.pieces():
            crc = crc32(piece, crc)
        return crc

    def pieces(self):
        """All knot records in order, some at a time; each is good until the next."""
        for first in range(0, self.count, KNOTS_A_BLOCK):
            many = min(KNOTS_A_BLOCK, self.count - first)
            self._write(first, many, 0)
            yield memoryview(self._buffers.body)[: many * KNOT_BYTES]

    def _write(self, first, count, place):
        """Write records into the frame's body."""
        buffers = self._buffers
        describe = buffers.placing
        describe[records.R_FIRST] = first
        describe[records.R_COUNT] = count
        describe[records.R_OUT] = place
        records.write(self._bins, buffers.cuts, buffers.body, describe)

    def _raw_bytes(self, first, count):
        if not count:
            return b""
        return memoryview(self._raw)[RAW_BYTES * first : RAW_BYTES * (first + count)]

    def block(self, session, sequence, first, count):
        """The frame of one block, of `count` knots from `first` on; good until the next call."""
        head = pack("block", session, sequence, {"first": first, "data": b""})
        place = len(head)
        body = self._buffers.body
        body[:place] = head
        body[place - 1] = count
        self._write(first, count, place)
        return self._frame(place + count * KNOT_BYTES)

    def raw_block(self, session, sequence, first, count):
        """The frame of `count` raw pairs from `first` on; good until the next call."""
        head = pack("raw_block", session, sequence, {"first": first, "data": b""})
        place = len(head)
        body = self._buffers.body
        body[:place] = head
        body[place - 2] = count * RAW_BYTES  # below 256; the length is a u16
        after = place + count * RAW_BYTES
        body[place:after] = self._raw_bytes(first, count)
        return self._frame(after)

    def _frame(self, length):
        body = self._buffers.body
        crc = crc32(memoryview(body)[:length])
        body[length : length + CRC_BYTES] = crc.to_bytes(CRC_BYTES, "little")
        coded = self._buffers.coded
        return memoryview(coded)[: self._cobs_into(body, length + CRC_BYTES, coded)]
