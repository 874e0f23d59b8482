"""Fetching a held sweep: blocks in any order and number become one sweep, proven by its CRC.

Comes in: the manifest and blocks. Goes out: gaps to ask for, then raw knots. How a message
travels is the link's business.
"""

from __future__ import annotations

from zlib import crc32

import numpy as np
import numpy.typing as npt

from kneewire import catalogue
from kneewire.fields import FIXED
from kneewire.messages import KNOT_BYTES, KNOTS_A_BLOCK, Message
from kneewise.errors import LinkError
from kneewise.instrument.trace import RawKnots
from kneewise.link.session import Session

TRIES = 40  # bursts in a row that bring nothing


class Reassembly:
    """The knots of one sweep as they come in. `resent` counts blocks that had to come again."""

    def __init__(self, manifest: Message) -> None:
        self.manifest = manifest
        self.count: int = manifest["knots"]
        self._records = bytearray(self.count * KNOT_BYTES)
        self._have = np.zeros(self.count, dtype=bool)
        self.resent = 0
        self._asked_again = False

    def take(self, block: Message) -> None:
        """Put a block where it belongs; one that reaches beyond the sweep is ignored."""
        first = block["first"]
        data = block["data"]
        after = first + len(data) // KNOT_BYTES
        if after > self.count:
            return
        self._records[first * KNOT_BYTES : after * KNOT_BYTES] = data
        self._have[first:after] = True
        if self._asked_again:
            self.resent += 1

    def gaps(self) -> list[tuple[int, int]]:
        """(first, count) of each run of knots that has not come."""
        missing = np.flatnonzero(~self._have)
        if not len(missing):
            return []
        runs = np.split(missing, np.flatnonzero(np.diff(missing) > 1) + 1)
        return [(int(run[0]), len(run)) for run in runs]

    def missing(self) -> int:
        """Knots that have not come."""
        return int(self.count - np.count_nonzero(self._have))

    def ask_again(self) -> None:
        """From now on every block that comes is one that had to be asked for again."""
        self._asked_again = True

    def forget(self) -> None:
        """Start anew: what came does not agree with the manifest."""
        self._have[:] = False
        self.ask_again()

    def crc_ok(self) -> bool:
        """True where the knots agree with the manifest's CRC."""
        return crc32(self._records) == int(self.manifest["knots_crc"])

    def knots(self) -> RawKnots:
        """The raw knots, read as a whole."""
        return unpack_records(bytes(self._records))


def fetch(session: Session, manifest: Message) -> Reassembly:
    """All knots of a manifest; gaps are asked for after each burst. LinkError.

    Where most of what was asked for is lost, smaller blocks are asked for.
    """
    reassembly = Reassembly(manifest)
    a_block = KNOTS_A_BLOCK
    fruitless = 0
    while fruitless < TRIES:
        missing = reassembly.missing()
        for first, count in reassembly.gaps():
            _fetch_run(session, reassembly, first, count, a_block)
        left = reassembly.missing()
        if not left:
            if reassembly.crc_ok():
                return reassembly
            reassembly.forget()
            left = reassembly.missing()
        fruitless = fruitless + 1 if left == missing else 0
        if 2 * left > missing:
            a_block = max(1, a_block // 3)
        reassembly.ask_again()
    raise LinkError(
        f"fetching sweep {manifest['sweep_id'].hex()[:8]}",
        found=f"{reassembly.missing()} of {reassembly.count} knots missing, and nothing in the "
        f"last {TRIES} bursts ({session.frames.summary()})",
        expected="all knots, with the CRC of the manifest",
        next_step="use a shorter or better cable, then sweep again: the held sweep comes first",
    )


def _fetch_run(
    session: Session, reassembly: Reassembly, first: int, count: int, a_block: int
) -> None:
    """Ask once for each part of a run of knots that fits into the device's window."""
    most = session.device["window"] * a_block
    for start in range(first, first + count, most):
        wanted = {
            "sweep_id": reassembly.manifest["sweep_id"],
            "first": start,
            "count": min(most, first + count - start),
            "a_block": a_block,
        }
        session.burst(wanted, reassembly.take)


# One record as it lies on the wire; numpy has no integer of 48 bits.
_WIDE = {"u32": "<u4", "u48": "V6", "u64": "<u8"}
KNOT_DTYPE = np.dtype([(name, _WIDE[kind]) for name, kind in catalogue.KNOT])


def knot_view(data: bytes) -> npt.NDArray[np.void]:
    """Knot records as a structured array over the same memory, shape (knots,)."""
    return np.frombuffer(data, dtype=KNOT_DTYPE)


def unpack_records(data: bytes) -> RawKnots:
    """Knot records as arrays."""
    view = knot_view(data)
    columns = {}
    for name, kind in catalogue.KNOT:
        size, _ = FIXED[kind]
        wide = np.zeros((len(view), 8), dtype=np.uint8)
        wide[:, :size] = np.ascontiguousarray(view[name]).view(np.uint8).reshape(-1, size)
        columns[name] = wide.view("<u8").reshape(-1).astype(np.uint64)
    return RawKnots(**columns)
