"""Files that claim to be recordings: whatever is in them, one clear message or a replay."""

from __future__ import annotations

import json
import os
import time
from collections.abc import Callable
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from kneewise import FullRate, KneewiseError, Trace, Tracer
from kneewise.errors import UsageError
from kneewise.link.frames import TO_DEVICE, TO_HOST
from kneewise.link.recording import (
    OPENED,
    Chunk,
    Recording,
    frames_of,
    protocol,
    read_recording,
)

HEADER = {
    "kneewise_recording": 1,
    "protocol": protocol(),
    "target": "COM5",
    "begun_utc": "2031-05-06T10:20:30+00:00",
}
LONGEST_S = 30.0  # a damaged recording that takes longer to replay counts as one that hangs


@cache
def good() -> bytes:
    """The recording of two short sweeps and a rest."""
    with TemporaryDirectory() as folder:
        path = Path(folder) / "good.jsonl"
        with Tracer.open("emulator:in-process", record=path) as tracer:
            tracer.sweep(knots=16)
            tracer.sweep(knots=24, full_rate=FullRate(start_s=0.001, duration_s=0.0008))
            tracer.rest()
        return path.read_bytes()


def written(folder: Path, *lines: dict[str, Any] | bytes, end: bytes = b"\n") -> Path:
    path = folder / "made.jsonl"
    coded = [line if isinstance(line, bytes) else json.dumps(line).encode() for line in lines]
    path.write_bytes(b"\n".join(coded) + end)
    return path


def message(path: Path) -> UsageError:
    with pytest.raises(UsageError) as caught:
        read_recording(path)
    assert caught.value.what == f"reading the recording {path}"
    assert caught.value.exit_code == 2
    return caught.value


def test_a_recording_reads_back_as_it_was_written(tmp_path: Path) -> None:
    path = written(
        tmp_path,
        HEADER,
        {"t": 0, "to": "device", "hex": "2300"},
        {"t": 0.25, "to": "host", "hex": "00FF", "more": "is passed over"},
        {"t": 7.5, "event": "opened"},
    )
    recording = read_recording(path)
    assert recording.target == "COM5"
    assert recording.begun_utc.isoformat() == "2031-05-06T10:20:30+00:00"
    assert recording.chunks == (
        Chunk(0.0, TO_DEVICE, b"#\0"),
        Chunk(0.25, TO_HOST, b"\0\xff"),
        Chunk(7.5, OPENED),
    )
    assert not recording.cut_short
    assert recording.remark() == "recorded 2031-05-06 10:20:30 UTC from COM5"


@pytest.mark.parametrize(
    ("line", "found"),
    [
        (b"nonsense", "no JSON object"),
        (b"[1, 2]", "no JSON object"),
        (b"\xff\xfe", "no JSON object"),
        (b"[" * 100_000, "no JSON object"),
        (b'{"t": 1' + b"0" * 5000 + b"}", "no JSON object"),
        ({"to": "host", "hex": ""}, "no time in seconds for 't'"),
        ({"t": True, "to": "host", "hex": ""}, "no time in seconds for 't'"),
        ({"t": "soon", "to": "host", "hex": ""}, "no time in seconds for 't'"),
        ({"t": -1, "to": "host", "hex": ""}, "a time 't' that is not from 0 to 1e+08 s"),
        (b'{"t": NaN, "to": "host", "hex": ""}', "a time 't' that is not from 0 to 1e+08 s"),
        (b'{"t": 1' + b"0" * 400 + b', "to": "host"}', "a time 't' that is not from"),
        ({"t": 1, "to": "moon", "hex": ""}, 'neither "to": "device" or "host" nor "event"'),
        ({"t": 1, "to": ["host"], "hex": ""}, 'neither "to": "device" or "host" nor "event"'),
        ({"t": 1, "event": "shaken"}, 'neither "to": "device" or "host" nor "event"'),
        ({"t": 1, "to": "host"}, "no bytes for 'hex'"),
        ({"t": 1, "to": "host", "hex": "0"}, "no bytes for 'hex'"),
        ({"t": 1, "to": "host", "hex": 17}, "no bytes for 'hex'"),
        (b'{"t": 1, "to": "host", "hex": "' + b"00" * (1 << 19) + b'"}', "no JSON object"),
    ],
)
def test_a_damaged_line_is_named(line: Any, found: str, tmp_path: Path) -> None:
    one = {"t": 0, "to": "device", "hex": "2300"}
    error = message(written(tmp_path, HEADER, one, line, one))
    assert error.found.startswith(f"line 3: {found}")
    assert error.expected == "a recording as `--record FILE` makes it"
    assert error.next_step == (
        "take the file from a backup, or record anew; "
        "the lines before that one make a recording of their own"
    )


@pytest.mark.parametrize(
    ("changes", "found"),
    [
        ({"kneewise_recording": None}, "no header of a recording"),
        ({"kneewise_recording": True}, "no header of a recording"),
        ({"protocol": 0.1}, "no text for 'protocol'"),
        ({"target": None}, "no text for 'target'"),
        ({"begun_utc": "yesterday"}, "no date and time for 'begun_utc'"),
        ({"begun_utc": 7}, "no date and time for 'begun_utc'"),
        ({"begun_utc": "9999-12-31T00:00:00+00:00"}, "no date and time for 'begun_utc'"),
    ],
)
def test_a_damaged_header_is_named(changes: dict[str, Any], found: str, tmp_path: Path) -> None:
    error = message(written(tmp_path, {**HEADER, **changes}))
    assert error.found == f"line 1: {found}"


def test_an_empty_file_and_one_of_another_kind(tmp_path: Path) -> None:
    assert message(written(tmp_path, end=b"")).found == "line 1: an empty file"
    assert message(written(tmp_path, b"PAR1\x15\x04")).found == "line 1: no JSON object"
    # Not even the header is whole: there is nothing to go by.
    assert message(written(tmp_path, b'{"kneewise_rec', end=b"")).found == "line 1: no JSON object"


def test_a_newer_format_asks_for_the_newer_program(tmp_path: Path) -> None:
    error = message(written(tmp_path, {**HEADER, "kneewise_recording": 2}))
    assert (error.found, error.expected) == ("line 1: format 2", "format 1")
    assert error.next_step == "read it with the version of kneewise that recorded it"


def test_an_absent_file(tmp_path: Path) -> None:
    error = message(tmp_path / "absent.jsonl")
    assert error.found == "No such file or directory"
    assert error.expected == "a file that can be read"
    assert error.next_step == (
        "check the path; `--record FILE` makes a recording, --on names a tracer"
    )
    assert message(tmp_path).expected == "a file that can be read"


def test_a_last_line_that_is_cut_short_is_left_out_and_told(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    """A program that was killed, or a full disk, leaves half a line: all before it counts."""
    whole = good()
    last = whole.rindex(b"\n", 0, -1) + 1
    chunks = read_recording(written(tmp_path, whole, end=b"")).chunks
    for end in range(last + 1, len(whole) - 1):
        caplog.clear()
        recording = read_recording(written(tmp_path, whole[:end], end=b""))
        assert recording.cut_short
        assert recording.chunks == chunks[:-1]
        assert recording.remark().endswith("; its last line is cut short and left out")
        assert caplog.messages[0].endswith("is cut short and left out")
    # The line is whole where its line end alone is missing.
    assert read_recording(written(tmp_path, whole[:-1], end=b"")).chunks == chunks


def test_frames_of_a_recording_tell_damage_text_and_openings(tmp_path: Path) -> None:
    path = written(
        tmp_path,
        HEADER,
        {"t": 0.5, "to": "host", "hex": b"relay chatters\r\n\0".hex()},
        {"t": 0.75, "to": "host", "hex": "0909ff00"},
        {"t": 1.0, "to": "device", "hex": "23000203"},
        {"t": 2.0, "event": "opened"},
        {"t": 3.0, "to": "host", "hex": b">>> ".hex()},
    )
    seen = [(one.time_s, one.way, one.remark) for one in frames_of(read_recording(path))]
    assert seen == [
        (0.5, TO_HOST, "text: relay chatters"),
        (0.75, TO_HOST, "bad frame: cobs"),
        (2.0, TO_DEVICE, "bad frame: cut short"),
        (2.0, "", "the port was opened again"),
        (3.0, TO_HOST, "text: >>>"),
    ]


# -- any damage --------------------------------------------------------------------------------


def try_all(path: Path) -> None:
    """Read it, show it, replay it: KneewiseError or a trace, and soon."""
    started = time.monotonic()
    try:
        recording = read_recording(path)
    except KneewiseError:
        return
    assert isinstance(recording, Recording)
    for seen in frames_of(recording):
        json.dumps(seen.row())
    actions: tuple[Callable[[Tracer], Any], ...] = (Tracer.held, Tracer.sweep, Tracer.rest)
    try:
        with Tracer.open(f"replay:{path}") as tracer:
            for action in actions:
                try:
                    done = action(tracer)
                except KneewiseError:
                    continue
                if action is Tracer.sweep:
                    assert isinstance(done, Trace)
                    assert done.label == "EMULATED, REPLAYED"
                    assert done.integrity.manifest_crc_ok
    except KneewiseError:
        pass
    assert time.monotonic() - started < LONGEST_S


def tried(content: bytes) -> None:
    with TemporaryDirectory() as folder:
        path = Path(folder) / "damaged.jsonl"
        path.write_bytes(content)
        try_all(path)


@settings(max_examples=200, deadline=None)
@given(st.binary(max_size=300))
@example(b"")
@example(b"\n")
@example(json.dumps(HEADER).encode())
def test_any_bytes_are_read_or_refused(content: bytes) -> None:
    tried(content)


def _changed(line: bytes, name: str, value: Any) -> bytes:
    return json.dumps({**json.loads(line), name: value}).encode()


@st.composite
def damaged(draw: st.DrawFn) -> bytes:
    """A good recording with lines lost, repeated, swapped, changed, and bytes changed or cut."""
    lines = good().splitlines()
    number = st.integers(0, len(lines) - 1)
    for _ in range(draw(st.integers(1, 6))):
        place, other = draw(number) % len(lines), draw(number) % len(lines)
        what = draw(st.integers(0, 7))
        if what == 0 and len(lines) > 1:
            del lines[place]
        elif what == 1:
            lines.insert(other, lines[place])
        elif what == 2:
            lines[place], lines[other] = lines[other], lines[place]
        elif what == 3:
            lines[place] = _changed(lines[place], "to", draw(st.sampled_from(["host", "device"])))
        elif what == 4:
            lines[place] = _changed(lines[place], "t", draw(st.floats(0.0, 1e8)))
        elif what == 5:
            data = bytearray.fromhex(json.loads(lines[place]).get("hex", ""))
            if data:
                data[draw(st.integers(0, len(data) - 1))] = draw(st.integers(0, 255))
                lines[place] = _changed(lines[place], "hex", data.hex())
        elif what == 6:
            lines[place] = json.dumps({"t": 1.0, "event": "opened"}).encode()
        else:
            start = min(place, other)
            del lines[start + 1 : max(place, other)]
    content = bytearray(b"\n".join(lines))
    if draw(st.booleans()):
        content[draw(st.integers(0, len(content) - 1))] = draw(st.integers(0, 255))
    return bytes(content[: draw(st.integers(0, len(content)))] if draw(st.booleans()) else content)


@settings(max_examples=150, deadline=None, suppress_health_check=list(HealthCheck))
@given(damaged())
def test_any_damage_to_a_good_recording_ends_in_a_message_or_a_trace(content: bytes) -> None:
    """A damaged recording would show a crash of the program, or show nothing for ever."""
    tried(content)


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="no devices here to read from")
def test_a_device_that_gives_bytes_for_ever_is_no_recording() -> None:
    error = message(Path("/dev/zero"))
    assert error.found == "line 1: no JSON object"
