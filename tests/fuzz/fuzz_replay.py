"""Fuzzes the reading and the replaying of recordings: any file, and a session over it.

python -m tests.fuzz.fuzz_replay FOUND tests/fuzz/corpus/replay -max_total_time=300
"""

from __future__ import annotations

import atexit
import json
import shutil
import tempfile
from contextlib import suppress
from dataclasses import replace
from pathlib import Path

from .coding import mended
from .targets import fuzz, instrumented

with instrumented(__name__, "kneewire", "kneewise.link"):
    from kneewise.errors import KneewiseError
    from kneewise.link.frames import TO_DEVICE
    from kneewise.link.recording import Recording, frames_of, read_recording
    from kneewise.link.replay import ReplayPort
    from kneewise.link.session import Session

NONCE = 0x41424344
SWEEP_ID = bytes(range(16))
ASKED = (
    ("status", {}),
    (
        "arm",
        {
            **{"knots": 16, "closed_limit_ms": 100, "confirmed": 1, "raw_from_us": 0},
            **{"raw_pairs": 0, "limit_mv": 0xFFFFFFFF, "limit_ma": 0xFFFFFFFF, "exercise": 0},
        },
    ),
    ("fire", {"token": 1, "sweep_id": SWEEP_ID}),
    ("read_manifest", {}),
    ("acknowledge", {"sweep_id": SWEEP_ID}),
)
FOLDER = Path(tempfile.mkdtemp(prefix="kneewise-fuzz-"))
atexit.register(shutil.rmtree, FOLDER, ignore_errors=True)


def one_input(data: bytes) -> None:
    """Nothing but a KneewiseError, whatever the file holds and whatever is asked of it."""
    path = FOLDER / "recording.jsonl"
    path.write_bytes(data)
    try:
        recording = read_recording(path)
    except KneewiseError:
        return
    replayed(recording)
    # Past the CRC as well, which a damaged frame does not pass by chance.
    chunks = tuple(
        replace(chunk, data=mended(chunk.data, toward_device=chunk.way == TO_DEVICE))
        for chunk in recording.chunks
    )
    replayed(replace(recording, chunks=chunks))


def replayed(recording: Recording) -> None:
    recording.remark()
    for seen in frames_of(recording):
        json.dumps(seen.row())
    try:
        port = ReplayPort(recording)
    except KneewiseError:
        return
    for _ in range(2):
        with suppress(KneewiseError):
            conversed(Session(port.connect(), host_nonce=NONCE))
        port.utc()
        port.close()


def conversed(session: Session) -> None:
    session.hello(1.0)
    for name, values in ASKED:
        with suppress(KneewiseError):
            session.request(name, values, deadline_s=1.0)
    session.wait_quiet(1.0)
    wanted = {"sweep_id": SWEEP_ID, "first": 0, "count": 16, "a_block": 0}
    for name in ("fetch", "fetch_raw"):
        with suppress(KneewiseError):
            session.burst(name, wanted, lambda block: None)


if __name__ == "__main__":
    fuzz(one_input)
