"""Fetching a held sweep: blocks in any order and number become one sweep, proven by its CRC.

Comes in: the manifest and blocks. Goes out: gaps to ask for, then raw knots and raw
pairs. How a message travels is the link's business.
"""

from __future__ import annotations

from dataclasses import dataclass
from zlib import crc32

import numpy as np
import numpy.typing as npt

from kneewire import catalogue
from kneewire.fields import FIXED
from kneewire.messages import KNOT_BYTES, KNOTS_A_BLOCK, RAW_A_BLOCK, RAW_BYTES, Message
from kneewise.errors import LinkError
from kneewise.instrument.trace import RawKnots, RawPairs
from kneewise.link.session import Session

TRIES = 40  # bursts in a row that bring nothing
LEAST_BYTES = 24  # of records in a block, where there is room for more: headers come on top


@dataclass(frozen=True, slots=True)
class Wanted:
    """What is fetched in blocks: its request, and where the manifest tells of it."""

    what: str
    request: str
    count: str
    crc: str
    record_bytes: int


KNOTS = Wanted("knots", "fetch", "knots", "knots_crc", KNOT_BYTES)
RAW_PAIRS = Wanted("pairs", "fetch_raw", "raw_pairs", "raw_crc", RAW_BYTES)


class Reassembly:
    """Records of one sweep as they come in. `resent` counts blocks that had to come again."""

    def __init__(self, manifest: Message, wanted: Wanted = KNOTS) -> None:
        self.manifest = manifest
        self.wanted = wanted
        self.count: int = manifest[wanted.count]
        self._records = bytearray(self.count * wanted.record_bytes)
        self._have = np.zeros(self.count, dtype=bool)
        self.resent = 0
        self._asked_again = False

    def take(self, block: Message) -> None:
        """Put a block where it belongs; one that cannot belong to the sweep is ignored."""
        first = block["first"]
        data = block["data"]
        size = self.wanted.record_bytes
        after = first + len(data) // size
        if len(data) % size or after > self.count:
            return
        self._records[first * size : after * size] = data
        self._have[first:after] = True
        if self._asked_again:
            self.resent += 1

    def gaps(self) -> list[tuple[int, int]]:
        """(first, count) of each run of records that has not come."""
        missing = np.flatnonzero(~self._have)
        if not len(missing):
            return []
        runs = np.split(missing, np.flatnonzero(np.diff(missing) > 1) + 1)
        return [(int(run[0]), len(run)) for run in runs]

    def missing(self) -> int:
        """Records that have not come."""
        return int(self.count - np.count_nonzero(self._have))

    def ask_again(self) -> None:
        """From now on every block that comes is one that had to be asked for again."""
        self._asked_again = True

    def forget(self) -> None:
        """Start anew: what came does not agree with the manifest."""
        self._have[:] = False
        self.ask_again()

    def crc_ok(self) -> bool:
        """True where the records agree with the manifest's CRC."""
        return crc32(self._records) == int(self.manifest[self.wanted.crc])

    def records(self) -> bytes:
        """All of them, as they lie on the wire."""
        return bytes(self._records)

    def knots(self) -> RawKnots:
        """The raw knots, read as a whole."""
        return unpack_records(self.records())


def fetch(session: Session, manifest: Message) -> Reassembly:
    """All knots of a manifest; gaps are asked for after each burst. LinkError.

    Where most of what was asked for is lost, smaller blocks are asked for, and gaps that lie near
    each other as one.
    """
    return _fetched(session, Reassembly(manifest, KNOTS), KNOTS_A_BLOCK)


def fetch_raw(session: Session, manifest: Message) -> RawPairs:
    """All raw pairs, in the way of `fetch`; it may be none. LinkError."""
    pairs = _fetched(session, Reassembly(manifest, RAW_PAIRS), RAW_A_BLOCK)
    codes = np.frombuffer(pairs.records(), dtype="<u2").reshape(-1, 2).astype(np.uint16)
    return RawPairs(int(manifest["raw_first"]), codes[:, 0].copy(), codes[:, 1].copy())


def _fetched(session: Session, reassembly: Reassembly, a_block: int) -> Reassembly:
    """All records, in blocks of `a_block` at most."""
    fruitless = 0
    fewest = max(1, LEAST_BYTES // reassembly.wanted.record_bytes)
    near = 0
    while fruitless < TRIES:
        missing = reassembly.missing()
        for first, count in _joined(reassembly.gaps(), near):
            _fetch_run(session, reassembly, first, count, a_block)
        left = reassembly.missing()
        if not left:
            if reassembly.crc_ok():
                return reassembly
            reassembly.forget()
            left = reassembly.missing()
        fruitless = fruitless + 1 if left == missing else 0
        if 2 * left > missing:
            a_block = max(min(a_block, fewest), a_block // 3)
            near = session.device["window"] * a_block
        reassembly.ask_again()
    what = reassembly.wanted.what
    raise LinkError(
        f"fetching sweep {reassembly.manifest['sweep_id'].hex()[:8]}",
        found=f"{reassembly.missing()} of {reassembly.count} {what} missing, and nothing in the "
        f"last {TRIES} bursts ({session.frames.summary()})",
        expected=f"all {what}, with the CRC of the manifest",
        next_step="use a shorter or better cable, then sweep again: the held sweep comes first",
    )


def _joined(gaps: list[tuple[int, int]], near: int) -> list[tuple[int, int]]:
    """Gaps that lie within `near` records of each other as one, with what is between them.

    On a bad link it is the asking that is lost, and waited for, once for each gap.
    """
    found: list[tuple[int, int]] = []
    for first, count in gaps:
        begin = found[-1][0] if found else first
        if found and first + count - begin <= near:
            found[-1] = (begin, first + count - begin)
        else:
            found.append((first, count))
    return found


def _fetch_run(
    session: Session, reassembly: Reassembly, first: int, count: int, a_block: int
) -> None:
    """Ask once for each part of a run of records that fits into the device's window."""
    most = session.device["window"] * a_block
    for start in range(first, first + count, most):
        values = {
            "sweep_id": reassembly.manifest["sweep_id"],
            "first": start,
            "count": min(most, first + count - start),
            "a_block": a_block,
        }
        session.burst(reassembly.wanted.request, values, reassembly.take)


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
