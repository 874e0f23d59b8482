"""One trace, one file: a Parquet table that explains itself.

Comes in: a `Trace`. Goes out: a file with one row a knot, as measured and in SI units, the
unit of each column in its field's metadata, and all the rest as JSON under the schema key
`kneewise`, a scout sweep with its knots included; and the equal `Trace` again. Pairs kept one
by one are lists of codes in the row of the knot that they belong to. A file appears whole or
not at all, and a stored trace is never overwritten. Choosing folders and listing them does not
belong here.
"""

from __future__ import annotations

import errno
import json
import os
import re
import uuid
import zlib
from collections.abc import Callable
from dataclasses import asdict, replace
from datetime import UTC, datetime
from math import isfinite
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from kneewise.errors import ArchiveError
from kneewise.instrument.full_rate import FullRatePairs
from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import Check, Integrity, RawKnots, RawPairs, Reading, Trace

SCHEMA = 2
"""Version of the file's content. A higher one may hold what this program cannot read; files of
version 1 have no raw pairs, no zero of the voltage and no scout."""

_KEY = b"kneewise"
_CRC_KEY = b"kneewise_crc32"

_RAW_COLUMNS = {
    "time_us": ("us", "device time since boot at the middle of the knot's voltage conversions"),
    "voltage_sum": ("code", "sum of voltage codes over the pairs"),
    "current_sum": ("code", "sum of current codes over the pairs"),
    "pairs": ("1", "pairs in the knot"),
    "voltage_scatter": ("code^2", "sum of squared differences of successive voltage codes"),
    "current_scatter": ("code^2", "sum of squared differences of successive current codes"),
}
_CALIBRATED_COLUMNS = {
    "time_s": ("time", "s", "time since the contact began to conduct"),
    "voltage_v": ("voltage", "V", "mean voltage of the source"),
    "current_a": ("current", "A", "mean current of the source"),
    "voltage_sigma_v": ("voltage_sigma", "V", "standard deviation of the mean, from scatter"),
    "current_sigma_a": ("current_sigma", "A", "standard deviation of the mean, from scatter"),
    "weight": ("weight", "1", "pairs averaged"),
}
_PAIR_COLUMNS = {
    "pair_voltage_codes": ("voltage", "code", "voltage codes of the raw pairs"),
    "pair_current_codes": ("current", "code", "current codes of the raw pairs"),
}
_PLAIN_FIELDS = (
    "trace_id",
    "rung",
    "emulated",
    "device",
    "profile",
    "started_utc",
    "started_uncertainty_s",
    "end_reason",
    "voc_static",
    "residual_capacitor_v",
    "scenario",
    "truth",
)
_FULL_RATE_FIELDS = ("asked", "pair_ns", "skew_ns")
_CODES = pa.list_(pa.field("code", pa.uint16(), nullable=False))
_NOT_FINITE = ("inf", "-inf", "nan")


def save(trace: Trace, folder: Path | str) -> Path:
    """Store `trace` in `folder` (made where missing) and return the file's path.

    The name is the start in UTC, the first eight characters of the trace's id and, where there
    is one, its label. A trace that is stored already is left as it is and its path returned.

    Raises ArchiveError where the file cannot be written, where the trace holds what JSON
    cannot, or where its name is taken by other content. Nothing is left behind then.
    """
    folder = Path(folder)
    what = f"storing trace {trace.trace_id}"
    content = _encode(_table(trace, what))
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for target in _targets(trace, folder, what):
            if not target.exists():
                _write_whole(target, content)
                return target
            if target.read_bytes() == content or _same_trace(target, trace):
                return target
    except OSError as error:
        raise _write_error(what, folder, len(content), error) from error
    raise ArchiveError(
        what,
        found=f"{target} with the same trace id but other content",
        expected="one content for one trace id",
        next_step="store this trace in another folder and compare the two files",
    )


def load(path: Path | str) -> Trace:
    """The trace in `path`, equal to the one that was stored, bit by bit.

    Sequences in `device` and `scenario` come back as lists. Raises ArchiveError for a file
    that is missing, damaged, not a trace, or written by a newer program.
    """
    path = Path(path)
    what = f"reading {path}"
    try:
        content = path.read_bytes()
    except OSError as error:
        raise ArchiveError(
            what,
            found=error.strerror or str(error),
            expected="a readable file",
            next_step="check the path and the permissions",
        ) from error
    try:
        table = pq.read_table(pa.BufferReader(content), page_checksum_verification=True)
    except (pa.ArrowException, OSError, ValueError) as error:
        first_line = f"{error}\n".splitlines()[0]
        raise ArchiveError(
            what,
            found=f"no whole Parquet file ({first_line[:120]})",
            expected="a trace as `save` writes it",
            next_step="take the file from a backup; if a copy was cut short, copy it again",
        ) from error
    head = _head(table, what)
    try:
        return _trace(table, head)
    except (KeyError, TypeError, ValueError, pa.ArrowException) as error:
        raise _damaged(what, f"content that does not form a trace ({error!r})") from error


def _table(trace: Trace, what: str) -> pa.Table:
    fields, columns = [], []
    for name, (unit, text) in _RAW_COLUMNS.items():
        fields.append(_field(name, pa.uint64(), unit, text))
        columns.append(pa.array(np.asarray(getattr(trace.raw, name), dtype=np.uint64)))
    for name, (attribute, unit, text) in _CALIBRATED_COLUMNS.items():
        fields.append(_field(name, pa.float64(), unit, text))
        columns.append(pa.array(np.asarray(getattr(trace, attribute), dtype=np.float64)))
    if trace.full_rate is not None:
        offsets = _offsets(trace, trace.full_rate.raw, what)
        for name, (attribute, unit, text) in _PAIR_COLUMNS.items():
            codes = pa.array(getattr(trace.full_rate.raw, attribute), pa.uint16())
            fields.append(_field(name, _CODES, unit, text))
            columns.append(pa.ListArray.from_arrays(offsets, codes, type=_CODES))
    lengths = {field.name: len(column) for field, column in zip(fields, columns, strict=True)}
    if len(set(lengths.values())) != 1:
        raise ArchiveError(
            what,
            found=f"columns of unlike length ({lengths})",
            expected="one value a knot in each",
            next_step="report this: a trace must not be able to get into this state",
        )
    head = json.dumps(_plain(_describe(trace), what), allow_nan=False).encode()
    crc = f"{zlib.crc32(head):08x}".encode()
    schema = pa.schema(fields, metadata={_KEY: head, _CRC_KEY: crc})
    return pa.Table.from_arrays(columns, schema=schema)


def _offsets(trace: Trace, pairs: RawPairs, what: str) -> Any:
    """Where the pairs of each knot begin; what lies beyond the knots goes to the last one."""
    if not len(trace.raw) and len(pairs):
        raise ArchiveError(
            what,
            found=f"{len(pairs)} raw pairs, and no knot",
            expected="knots that they belong to",
            next_step="report this: a trace must not be able to get into this state",
        )
    after = np.cumsum(trace.raw.pairs.astype(np.float64)) - pairs.first
    offsets = np.concatenate(([0.0], np.clip(after, 0.0, len(pairs)))).astype(np.int32)
    offsets[-1] = len(pairs)
    return pa.array(offsets)


def _field(name: str, kind: Any, unit: str, text: str) -> Any:
    return pa.field(name, kind, nullable=False, metadata={"unit": unit, "description": text})


def _describe(trace: Trace) -> dict[str, Any]:
    """All that is not a column, and a scout whole."""
    head: dict[str, Any] = {"schema": SCHEMA, "label": trace.label}
    head |= {name: getattr(trace, name) for name in _PLAIN_FIELDS}
    head["readings"] = {
        "static_voltage": asdict(trace.static_voltage),
        "zero_current": asdict(trace.zero_current),
    }
    if trace.zero_voltage is not None:
        head["readings"]["zero_voltage"] = asdict(trace.zero_voltage)
    if trace.full_rate is not None:
        head["full_rate"] = {
            "first": trace.full_rate.raw.first,
            **{name: getattr(trace.full_rate, name) for name in _FULL_RATE_FIELDS},
            "scales": asdict(trace.full_rate.scales),
        }
    if trace.scout is not None:
        head["scout"] = {**_describe(trace.scout), "knots": _columns(trace.scout)}
    head["integrity"] = asdict(trace.integrity)
    head["checks"] = [asdict(check) for check in trace.checks]
    # For whoever reads the file without this program; `load` works them out again.
    try:
        figures = trace.figures()
    except ValueError as error:
        head["figures"] = None
        head["no_figures_because"] = str(error)
    else:
        head["figures"] = {name: asdict(quantity) for name, quantity in figures.named()}
        head["isc_extrapolated_from_v"] = figures.isc_extrapolated_from_v
    return head


def _columns(trace: Trace) -> dict[str, list[int | float]]:
    """The knots' columns by name."""
    columns = {name: getattr(trace.raw, name) for name in _RAW_COLUMNS}
    columns |= {name: getattr(trace, each) for name, (each, *_) in _CALIBRATED_COLUMNS.items()}
    return {name: column.tolist() for name, column in columns.items()}


def _head(table: pa.Table, what: str) -> dict[str, Any]:
    metadata = table.schema.metadata or {}
    text = metadata.get(_KEY)
    if text is None:
        raise ArchiveError(
            what,
            found="a Parquet file without the schema key `kneewise`",
            expected="a trace as `save` writes it",
            next_step="choose another file; this one comes from another program",
        )
    if metadata.get(_CRC_KEY) != f"{zlib.crc32(text):08x}".encode():
        raise _damaged(what, "a description that does not match its CRC")
    try:
        head = _unplain(json.loads(text))
        version = int(head["schema"])
    except (ValueError, KeyError, TypeError) as error:
        raise _damaged(what, f"a description that is no JSON of ours ({error!r})") from error
    if version > SCHEMA:
        raise ArchiveError(
            what,
            found=f"schema version {version}",
            expected=f"version {SCHEMA} or lower",
            next_step="update kneewise: a newer one wrote this file",
        )
    return dict(head)


def _trace(table: pa.Table, head: dict[str, Any]) -> Trace:
    def column(name: str, kind: type[np.generic]) -> Any:
        values = table.column(name)
        if values.null_count or values.type != pa.from_numpy_dtype(kind):
            raise ValueError(f"column {name} is {values.type}")
        # A copy that owns its memory, so that the file's bytes can go.
        return np.array(values.to_numpy(), dtype=kind)

    def codes(name: str) -> Any:
        values = table.column(name).combine_chunks()
        if values.null_count or values.type.value_type != pa.uint16():
            raise ValueError(f"column {name} is {values.type}")
        return np.array(values.flatten().to_numpy(), dtype=np.uint16)

    trace = _trace_of(head, column)
    more: dict[str, Any] = {}
    if "full_rate" in head:
        about = head["full_rate"]
        more["full_rate"] = FullRatePairs(
            raw=RawPairs(about["first"], *(codes(name) for name in _PAIR_COLUMNS)),
            scales=Scales(**about["scales"]),
            **{name: about[name] for name in _FULL_RATE_FIELDS},
        )
    if "scout" in head:
        knots = head["scout"]["knots"]
        more["scout"] = _trace_of(
            head["scout"], lambda name, kind: np.array(knots[name], dtype=kind)
        )
    return replace(trace, **more)


def _trace_of(head: dict[str, Any], column: Callable[[str, type[np.generic]], Any]) -> Trace:
    """The trace of a description and its columns, without raw pairs and scout."""
    readings = {name: Reading(**reading) for name, reading in head["readings"].items()}
    return Trace(
        raw=RawKnots(**{name: column(name, np.uint64) for name in _RAW_COLUMNS}),
        static_voltage=readings["static_voltage"],
        zero_current=readings["zero_current"],
        zero_voltage=readings.get("zero_voltage"),
        integrity=Integrity(**head["integrity"]),
        checks=tuple(Check(**check) for check in head["checks"]),
        **{
            attribute: column(name, np.float64)
            for name, (attribute, _unit, _text) in _CALIBRATED_COLUMNS.items()
        },
        **{name: head[name] for name in _PLAIN_FIELDS},
    )


def _plain(value: Any, what: str) -> Any:
    """`value` as JSON can hold it; numbers that are not finite go as {"float": "inf"}."""
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, dict) and all(isinstance(key, str) for key in value):
        return {key: _plain(item, what) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item, what) for item in value]
    if isinstance(value, float) and not isfinite(value):
        return {"float": repr(value)}
    if value is None or isinstance(value, str | int | float):
        return value
    raise ArchiveError(
        what,
        found=f"{value!r} of type {type(value).__name__} in its description",
        expected="text, numbers, true or false, and lists and tables of these",
        next_step="take it out of the profile or the scenario, or write it as text",
    )


def _unplain(value: Any) -> Any:
    if isinstance(value, dict):
        if list(value) == ["float"] and value["float"] in _NOT_FINITE:
            return float(value["float"])
        return {key: _unplain(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_unplain(item) for item in value]
    return value


def _encode(table: pa.Table) -> bytes:
    sink = pa.BufferOutputStream()
    # Page checksums: a flipped bit on the disk is found instead of plotted.
    pq.write_table(table, sink, compression="zstd", use_dictionary=False, write_page_checksum=True)
    return bytes(sink.getvalue())


def _targets(trace: Trace, folder: Path, what: str) -> list[Path]:
    """Where the trace may lie: the short name, and one with the whole id should that be taken."""
    try:
        started = datetime.fromisoformat(trace.started_utc)
    except ValueError as error:
        raise ArchiveError(
            what,
            found=f"a start at {trace.started_utc!r}",
            expected="a date and time as in ISO 8601",
            next_step="check the clock of the host",
        ) from error
    if started.tzinfo is not None:
        started = started.astimezone(UTC)
    identity = re.sub(r"[^0-9A-Za-z]", "_", trace.trace_id)
    label = f"-{trace.label.replace(', ', '-')}" if trace.label else ""
    stem = f"{started:%Y%m%dT%H%M%SZ}"
    return [folder / f"{stem}-{part}{label}.parquet" for part in (identity[:8], identity)]


def _same_trace(path: Path, trace: Trace) -> bool:
    """True where `path` holds `trace`, whatever version of the Parquet library wrote it."""
    try:
        stored = load(path)
    except ArchiveError:
        return False
    return bool(_table(stored, "").equals(_table(trace, ""), check_metadata=True))


def _write_whole(target: Path, content: bytes) -> None:
    """Write beside the target, then rename: whoever looks sees no file or a whole one."""
    partial = target.with_name(f".{target.name}.{uuid.uuid4().hex}.partial")
    try:
        with partial.open("xb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        os.replace(partial, target)
    finally:
        partial.unlink(missing_ok=True)
    _sync_folder(target.parent)


def _sync_folder(folder: Path) -> None:
    """Make the rename last through a power cut, where the system lets a folder be synced."""
    try:
        handle = os.open(folder, os.O_RDONLY)
    except OSError:
        return
    try:
        os.fsync(handle)
    except OSError:
        return
    finally:
        os.close(handle)


def _write_error(what: str, folder: Path, size: int, error: OSError) -> ArchiveError:
    full = error.errno in (errno.ENOSPC, errno.EDQUOT)
    step = "free some space or choose another folder" if full else "choose another folder"
    return ArchiveError(
        what,
        found=f"{error.strerror or error} in {folder}",
        expected=f"room for {size // 1024 + 1} kB" if full else "a folder that takes files",
        next_step=f"{step}, then save again; the trace is still in memory",
    )


def _damaged(what: str, found: str) -> ArchiveError:
    return ArchiveError(
        what,
        found=found,
        expected="a trace as `save` writes it",
        next_step="take the file from a backup",
    )
