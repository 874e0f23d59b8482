"""The archive: a trace that was stored comes back equal, and no half file is ever found."""

from __future__ import annotations

import errno
import json
import os
import subprocess
import sys
import tempfile
import zlib
from dataclasses import fields, is_dataclass, replace
from datetime import UTC, date, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from traces import make_trace

from kneewise.archive import store
from kneewise.archive.store import load, save
from kneewise.errors import ArchiveError
from kneewise.instrument.full_rate import FullRatePairs
from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import Check, Integrity, RawKnots, RawPairs, Reading, Trace


def same(a: Any, b: Any) -> bool:
    """Equal in every bit, arrays, their types and signs of zero included."""
    if is_dataclass(a) and not isinstance(a, type):
        return type(a) is type(b) and all(
            same(getattr(a, field.name), getattr(b, field.name)) for field in fields(a)
        )
    if isinstance(a, np.ndarray):
        return bool(a.dtype == b.dtype and a.shape == b.shape and a.tobytes() == b.tobytes())
    if isinstance(a, dict):
        return list(a) == list(b) and all(same(a[key], b[key]) for key in a)
    if isinstance(a, list | tuple):
        return len(a) == len(b) and all(map(same, a, b))
    return type(a) is type(b) and repr(a) == repr(b)


numbers = st.floats()
whole = st.integers(0, 2**64 - 1)
words = st.text(max_size=12)
leaves = st.none() | st.booleans() | st.integers() | numbers | words
trees = st.dictionaries(
    words,
    st.recursive(
        leaves,
        lambda inner: st.lists(inner, max_size=3) | st.dictionaries(words, inner, max_size=3),
        max_leaves=8,
    ),
    max_size=4,
)


def any_pairs() -> st.SearchStrategy[FullRatePairs]:
    codes = st.integers(0, 40).flatmap(
        lambda count: st.tuples(*[hnp.arrays(np.uint16, count, elements=st.integers(0, 65535))] * 2)
    )
    return st.builds(
        FullRatePairs,
        raw=st.builds(lambda first, both: RawPairs(first, *both), st.integers(0, 2**32 - 1), codes),
        asked=st.none() | st.integers(0, 2048),
        pair_ns=st.integers(),
        skew_ns=st.integers(),
        scales=st.builds(Scales, *[numbers] * 12, st.integers(), numbers),
    )


@st.composite
def any_trace(draw: st.DrawFn, scouted: bool = True) -> Trace:
    """Traces with any numbers and words at all, sensible or not."""
    count = draw(st.integers(0, 30))

    def column(kind: type[np.generic], values: st.SearchStrategy[Any]) -> Any:
        return draw(hnp.arrays(kind, count, elements=values))

    # A scout's go as text, which has one nan only.
    any_float = st.floats(allow_subnormal=True, allow_nan=scouted)
    reading = st.builds(Reading, st.integers(), st.integers())
    return Trace(
        trace_id=draw(st.text(min_size=1, max_size=40)),
        rung=draw(words),
        emulated=draw(st.booleans()),
        device=draw(trees),
        profile=draw(st.dictionaries(words, st.integers() | words, max_size=4)),
        started_utc=draw(st.datetimes(timezones=st.just(UTC))).isoformat(),
        started_uncertainty_s=draw(numbers),
        end_reason=draw(words),
        raw=RawKnots(**{field.name: column(np.uint64, whole) for field in fields(RawKnots)}),
        static_voltage=Reading(draw(st.integers()), draw(st.integers())),
        zero_current=Reading(draw(st.integers()), draw(st.integers())),
        **{
            name: column(np.float64, any_float)
            for name in ("voltage", "current", "time", "weight", "voltage_sigma", "current_sigma")
        },
        voc_static=draw(numbers),
        residual_capacitor_v=draw(numbers),
        integrity=draw(st.builds(Integrity, *[whole] * 5, st.booleans(), whole)),
        checks=tuple(
            Check(*row)
            for row in draw(st.lists(st.tuples(words, st.booleans(), words, words), max_size=3))
        ),
        scenario=draw(st.none() | trees),
        truth=draw(st.none() | st.dictionaries(words, numbers, max_size=6)),
        zero_voltage=draw(st.none() | reading),
        full_rate=draw(st.none() | any_pairs()) if count and scouted else None,
        scout=draw(st.none() | any_trace(scouted=False)) if scouted else None,
    )


@settings(max_examples=80, deadline=None)
@given(trace=any_trace())
def test_what_is_stored_comes_back_equal_in_every_bit(trace: Trace) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = save(trace, folder)
        assert same(load(path), trace)
        assert save(trace, folder) == path


def test_a_whole_sweep_comes_back_with_the_same_figures(tmp_path: Path) -> None:
    trace = make_trace()
    back = load(save(trace, tmp_path))
    assert same(back, trace)
    assert back.figures() == trace.figures()


def test_the_name_tells_when_which_and_whether_it_was_emulated(tmp_path: Path) -> None:
    trace = make_trace()
    assert save(trace, tmp_path).name == "20310506T102030Z-5d3c9b1e-EMULATED.parquet"
    real = replace(trace, emulated=False, rung="tracer", started_utc="2031-05-06T12:20:30+02:00")
    assert save(real, tmp_path / "real" / "deep").name == "20310506T102030Z-5d3c9b1e.parquet"


def test_an_id_cannot_lead_out_of_the_folder(tmp_path: Path) -> None:
    path = save(replace(make_trace(), trace_id="../../../x"), tmp_path / "inner")
    assert path.parent == tmp_path / "inner"
    assert load(path).trace_id == "../../../x"


def test_the_file_explains_itself_to_any_parquet_reader(tmp_path: Path) -> None:
    trace = make_trace()
    table = pq.read_table(save(trace, tmp_path))
    assert table.column_names == [
        "time_us",
        "voltage_sum",
        "current_sum",
        "pairs",
        "voltage_scatter",
        "current_scatter",
        "time_s",
        "voltage_v",
        "current_a",
        "voltage_sigma_v",
        "current_sigma_a",
        "weight",
    ]
    assert table.schema.field("pairs").type == pa.uint64()
    assert table.schema.field("voltage_v").metadata[b"unit"] == b"V"
    assert table.schema.field("voltage_scatter").metadata[b"unit"] == b"code^2"
    assert all(field.metadata[b"description"] for field in table.schema)
    head = json.loads(table.schema.metadata[b"kneewise"])
    assert head["schema"] == store.SCHEMA
    assert head["label"] == "EMULATED"
    figures = trace.figures()
    assert head["figures"]["pmp"] == {
        "value": figures.pmp.value,
        "standard_uncertainty": figures.pmp.standard_uncertainty,
        "unit": "W",
    }
    assert head["isc_extrapolated_from_v"] == figures.isc_extrapolated_from_v
    assert head["truth"] == trace.truth
    assert head["checks"] == [
        {"name": "ring overruns", "holds": True, "found": "0", "expected": "0"}
    ]


def with_pairs(trace: Trace, first: int, count: int) -> Trace:
    """`trace` with pairs kept one by one, from number `first` on; invented codes."""
    draw = np.random.default_rng(2)
    codes = draw.integers(0, 4096, (2, count)).astype(np.uint16)
    scales = Scales(*[1.0] * 12, 4095, 9.0)
    kept = FullRatePairs(
        raw=RawPairs(first, *codes), asked=count + 5, pair_ns=4000, skew_ns=2000, scales=scales
    )
    return replace(trace, full_rate=kept)


def test_pairs_stand_in_the_row_of_their_knot_for_any_parquet_reader(tmp_path: Path) -> None:
    trace = with_pairs(make_trace(), 1000, 500)
    assert trace.full_rate is not None
    table = pq.read_table(save(trace, tmp_path))
    assert table.column_names[-2:] == ["pair_voltage_codes", "pair_current_codes"]
    assert table.schema.field("pair_voltage_codes").metadata[b"unit"] == b"code"
    rows = table.column("pair_voltage_codes").to_pylist()
    pair = 0
    for row, pairs in zip(rows, trace.raw.pairs.astype(int), strict=True):
        held = range(max(pair, 1000), min(pair + pairs, 1500))
        assert row == [int(trace.full_rate.raw.voltage[number - 1000]) for number in held]
        pair += pairs
    head = json.loads(table.schema.metadata[b"kneewise"])
    assert {name: head["full_rate"][name] for name in ("first", "asked", "pair_ns")} == {
        "first": 1000,
        "asked": 505,
        "pair_ns": 4000,
    }


def test_a_scout_is_stored_with_the_sweep_that_it_steered(tmp_path: Path) -> None:
    scout = make_trace(knots=32, seed=5)
    trace = replace(make_trace(), scout=scout)
    path = save(trace, tmp_path)
    assert list(tmp_path.iterdir()) == [path]
    head = json.loads(pq.read_schema(path).metadata[b"kneewise"])
    assert head["scout"]["figures"]["pmp"]["value"] == scout.figures().pmp.value
    assert head["scout"]["knots"]["voltage_v"] == scout.voltage.tolist()
    back = load(path)
    assert same(back, trace)
    assert back.scout is not None
    assert back.scout.figures() == scout.figures()


def test_pairs_without_a_knot_are_not_dropped_in_silence(tmp_path: Path) -> None:
    trace = with_pairs(make_trace(), 0, 5)
    none = RawKnots(*[np.zeros(0, np.uint64)] * 6)
    with pytest.raises(ArchiveError, match="5 raw pairs, and no knot"):
        save(replace(trace, raw=none), tmp_path)


def test_a_file_of_the_first_version_still_loads(tmp_path: Path) -> None:
    """Traces of years would be lost with an update."""
    trace = make_trace()
    path = save(trace, tmp_path)
    head = json.loads(pq.read_schema(path).metadata[b"kneewise"])
    del head["integrity"]["bounces"]
    assert not {"full_rate", "scout"} & set(head)
    assert set(head["readings"]) == {"static_voltage", "zero_current"}
    rewrite(path, schema=1, integrity=head["integrity"])
    assert same(load(path), trace)
    assert save(trace, tmp_path) == path


def test_a_trace_without_figures_is_stored_with_the_reason(tmp_path: Path) -> None:
    trace = make_trace()
    dark = replace(trace, current=np.zeros_like(trace.current))
    path = save(dark, tmp_path)
    head = json.loads(pq.read_schema(path).metadata[b"kneewise"])
    assert head["figures"] is None
    assert "no power" in head["no_figures_because"]
    assert same(load(path), dark)


def test_storing_twice_leaves_the_first_file_alone(tmp_path: Path) -> None:
    trace = make_trace()
    path = save(trace, tmp_path)
    before = path.stat().st_mtime_ns, path.stat().st_ino
    assert save(trace, tmp_path) == path
    assert (path.stat().st_mtime_ns, path.stat().st_ino) == before
    assert list(tmp_path.iterdir()) == [path]


def test_the_same_trace_written_by_another_library_version_counts_as_stored(tmp_path: Path) -> None:
    trace = make_trace()
    path = save(trace, tmp_path)
    pq.write_table(pq.read_table(path), path, compression="snappy")
    before = path.read_bytes()
    assert save(trace, tmp_path) == path
    assert path.read_bytes() == before


def test_another_trace_never_loses_its_file(tmp_path: Path) -> None:
    trace = make_trace()
    first = save(trace, tmp_path)
    content = first.read_bytes()
    # The same second and the same first eight characters.
    other = replace(trace, trace_id=trace.trace_id[:8] + "ffffffff", end_reason="stopped")
    second = save(other, tmp_path)
    assert second != first
    assert first.read_bytes() == content
    assert same(load(second), other)


def test_other_content_under_the_same_id_is_refused(tmp_path: Path) -> None:
    trace = make_trace()
    changed = replace(trace, end_reason="stopped")
    paths = {save(trace, tmp_path), save(changed, tmp_path)}
    assert len(paths) == 2
    with pytest.raises(ArchiveError, match=r"same trace id but other content.*Next: store this"):
        save(replace(trace, end_reason="third"), tmp_path)


def test_a_failed_rename_leaves_nothing_behind(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def refuse(source: Any, target: Any) -> None:
        # All was written before the rename: what would be renamed is a whole trace.
        assert same(load(source), trace)
        raise KeyboardInterrupt

    trace = make_trace()
    monkeypatch.setattr(os, "replace", refuse)
    with pytest.raises(KeyboardInterrupt):
        save(trace, tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_a_process_killed_before_the_rename_leaves_no_trace_file(tmp_path: Path) -> None:
    code = (
        "import os, sys; from traces import make_trace; from kneewise.archive.store import save\n"
        "os.replace = lambda source, target: os._exit(9)\n"
        "save(make_trace(), sys.argv[1])"
    )
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)}
    run = subprocess.run([sys.executable, "-c", code, str(tmp_path)], env=environment, check=False)
    assert run.returncode == 9
    assert list(tmp_path.glob("*.parquet")) == []
    assert load(save(make_trace(), tmp_path)).trace_id == make_trace().trace_id


@pytest.mark.parametrize("broken", ["fsync", "replace"])
def test_a_full_disk_is_told_and_leaves_nothing_behind(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, broken: str
) -> None:
    def full(*_arguments: Any) -> None:
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(os, broken, full)
    with pytest.raises(ArchiveError) as caught:
        save(make_trace(), tmp_path)
    assert "No space left on device" in caught.value.found
    assert caught.value.expected.startswith("room for ")
    assert caught.value.next_step.startswith("free some space or choose another folder")
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_is_a_file_is_told(tmp_path: Path) -> None:
    (tmp_path / "taken").write_text("")
    with pytest.raises(ArchiveError, match="Next: choose another folder, then save again"):
        save(make_trace(), tmp_path / "taken")


def test_a_folder_that_cannot_be_synced_is_no_error(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def no_folders(*_arguments: Any) -> int:
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr(os, "open", no_folders)
    store._sync_folder(tmp_path)


def test_what_json_cannot_hold_is_told(tmp_path: Path) -> None:
    trace = replace(make_trace(), scenario={"day": date(2031, 5, 6)})
    with pytest.raises(ArchiveError, match=r"datetime.date\(2031, 5, 6\) of type date"):
        save(trace, tmp_path)
    with pytest.raises(ArchiveError, match="a start at 'noon'"):
        save(replace(make_trace(), started_utc="noon"), tmp_path)


def test_a_missing_file_is_told(tmp_path: Path) -> None:
    with pytest.raises(ArchiveError, match=r"found No such file.*Next: check the path"):
        load(tmp_path / "none.parquet")


def test_a_file_cut_short_anywhere_is_told(tmp_path: Path) -> None:
    content = save(make_trace(knots=32), tmp_path).read_bytes()
    cut = tmp_path / "cut.parquet"
    for length in range(0, len(content), 97):
        cut.write_bytes(content[:length])
        with pytest.raises(ArchiveError, match="no whole Parquet file"):
            load(cut)


def test_a_file_of_another_program_is_told(tmp_path: Path) -> None:
    path = tmp_path / "other.parquet"
    pq.write_table(pa.table({"voltage_v": [1.0, 2.0]}), path)
    with pytest.raises(ArchiveError, match="without the schema key `kneewise`"):
        load(path)


def rewrite(path: Path, **changes: Any) -> None:
    """Change the description, CRC and all."""
    table = pq.read_table(path)
    head = json.loads(table.schema.metadata[b"kneewise"])
    for name, value in changes.items():
        if value is None:
            del head[name]
        else:
            head[name] = value
    text = json.dumps(head).encode()
    crc = f"{zlib.crc32(text):08x}".encode()
    metadata = {b"kneewise": text, b"kneewise_crc32": crc}
    pq.write_table(table.replace_schema_metadata(metadata), path)


def test_a_newer_schema_is_told(tmp_path: Path) -> None:
    path = save(make_trace(), tmp_path)
    rewrite(path, schema=store.SCHEMA + 1)
    with pytest.raises(ArchiveError, match="Next: update kneewise") as caught:
        load(path)
    assert caught.value.found == f"schema version {store.SCHEMA + 1}"


def test_a_description_that_is_not_whole_is_told(tmp_path: Path) -> None:
    path = save(make_trace(), tmp_path)
    rewrite(path, integrity=None)
    with pytest.raises(ArchiveError, match="content that does not form a trace"):
        load(path)
    rewrite(path, schema="one")
    with pytest.raises(ArchiveError, match="no JSON of ours"):
        load(path)


def test_a_flipped_bit_is_told_or_does_no_harm(tmp_path: Path) -> None:
    """Never a wrong number: page checksums guard the columns, a CRC the description."""
    trace = make_trace(knots=32)
    path = save(trace, tmp_path)
    content = path.read_bytes()
    told = 0
    for place in range(0, len(content), 31):
        changed = bytearray(content)
        changed[place] ^= 1 << place % 8
        path.write_bytes(changed)
        try:
            back = load(path)
        except ArchiveError:
            told += 1
        else:
            assert same(back, trace), place
    assert told > 100


def test_a_start_without_zone_counts_as_utc(tmp_path: Path) -> None:
    naive = datetime(2031, 5, 6, 10, 20, 30).isoformat()
    path = save(replace(make_trace(), started_utc=naive), tmp_path)
    assert path.name.startswith("20310506T102030Z-")
