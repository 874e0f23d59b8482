"""What a sweep says on the terminal: a summary for people, an object for scripts."""

from __future__ import annotations

import math
from datetime import datetime
from pathlib import Path
from typing import Any

from kneewise.curve.figures import Figures, NoFigures, Quantity
from kneewise.instrument.scout import maximum_s
from kneewise.instrument.trace import Trace

RUNGS = {
    "micropython": "the firmware ran in MicroPython against the emulated plant",
    "in-process": "the firmware ran in-process on CPython against the emulated plant",
    "chip": "the firmware ran on an emulated RP2040 with the emulated plant beside it",
    "emulator": "an emulated tracer behind a port",
    "replay": "a recording, replayed; nothing was measured anew",
    "tracer": "a tracer",
}
NAMES = {
    "isc": "Isc",
    "voc": "Voc",
    "pmp": "Pmp",
    "vmp": "Vmp",
    "imp": "Imp",
    "ff": "fill factor",
}


def as_json(trace: Trace, file: Path, picture: Path) -> dict[str, Any]:
    """The object of `--json`: SI units; figures are null where the curve does not give them."""
    figures, reason = _figures(trace)
    integrity = trace.integrity
    return {
        "label": trace.label,
        "trace_id": trace.trace_id,
        "rung": trace.rung,
        "emulated": trace.emulated,
        "started_utc": trace.started_utc,
        "voltage": trace.voltage.tolist(),
        "current": trace.current.tolist(),
        "time": trace.time.tolist(),
        "weight": trace.weight.tolist(),
        "figures": {name: getattr(figures, name).value if figures else None for name in NAMES},
        "no_figures": reason,
        "truth": trace.truth,
        "integrity": {
            "knots": integrity.knots,
            "pairs": integrity.pairs,
            "frames_bad": integrity.frames_bad,
            "blocks_resent": integrity.blocks_resent,
            "ring_overruns": integrity.ring_overruns,
            "manifest_crc_ok": integrity.manifest_crc_ok,
            "bounces": integrity.bounces,
        },
        "zeros": {
            "voltage_code": trace.zero_voltage.code if trace.zero_voltage else None,
            "current_code": trace.zero_current.code,
        },
        "full_rate": _full_rate(trace),
        "scout": _scout(trace),
        "checks": [
            {
                "name": check.name,
                "holds": check.holds,
                "found": check.found,
                "expected": check.expected,
            }
            for check in trace.checks
        ],
        "residual_capacitor_v": trace.residual_capacitor_v,
        "file": str(file),
        "picture": str(picture),
    }


def _full_rate(trace: Trace) -> dict[str, Any] | None:
    pairs = trace.full_rate
    if pairs is None:
        return None
    begin_s, end_s = pairs.stretch_s
    return {
        "pairs": len(pairs),
        "asked": pairs.asked,
        "first": pairs.raw.first,
        "from_s": begin_s,
        "to_s": end_s,
    }


def _scout(trace: Trace) -> dict[str, Any] | None:
    scout = trace.scout
    if scout is None:
        return None
    return {
        "trace_id": scout.trace_id,
        "started_utc": scout.started_utc,
        "knots": len(scout.raw),
        "lasted_s": float(scout.time[-1]),
        "maximum_s": maximum_s(scout),
        "figures": {name: getattr(scout.figures(), name).value for name in NAMES},
    }


def as_text(trace: Trace, file: Path, picture: Path) -> str:
    """The summary of `kneewise sweep`."""
    started = datetime.fromisoformat(trace.started_utc)
    heading = (
        f"{trace.label + ': ' if trace.label else ''}sweep {trace.trace_id[:8]}, "
        f"{started:%Y-%m-%d %H:%M:%S} UTC"
    )
    lines = [heading, f"  {RUNGS.get(trace.rung, trace.rung)}"]
    if trace.scenario is not None:
        lines.append(f"  scenario: {trace.scenario['title']}, {trace.scenario['place']}")
    lines.append("")
    lines += _figure_lines(trace)
    integrity = trace.integrity
    repeated = f", {integrity.blocks_resent} blocks sent again" if integrity.blocks_resent else ""
    lines += [
        "",
        f"  {integrity.knots} knots from {integrity.pairs} pairs of V and I"
        f" in {1e3 * trace.time[-1]:.1f} ms{repeated}",
        *_sweep_lines(trace),
        f"  capacitor left at {trace.residual_capacitor_v:.2f} V"
        " (measure it yourself before touching the terminals)",
        "",
        "  checked:",
    ]
    for check in trace.checks:
        lines.append(f"    {'holds ' if check.holds else 'FAILED'}  {check.name}: {check.found}")
        if not check.holds:
            lines.append(f"            expected {check.expected}")
    lines += ["", f"  stored   {file}", f"  picture  {picture}"]
    return "\n".join(lines)


def _sweep_lines(trace: Trace) -> list[str]:
    """The scout, the raw pairs, the zeros and the contact, a line each."""
    lines = []
    pairs, scout, bounces = trace.full_rate, trace.scout, trace.integrity.bounces
    if pairs is not None:
        begin_s, end_s = pairs.stretch_s
        kept = f"{len(pairs)} raw pairs, {1e3 * begin_s:.2f} to {1e3 * end_s:.2f} ms"
        if not len(pairs):
            kept = "no raw pairs"
        short = pairs.asked is not None and len(pairs) < pairs.asked
        lines.append(
            f"  {kept}" + (f"; {pairs.asked} were asked for, the sweep ended first" * short)
        )
    if scout is not None:
        lines.append(
            f"  steered by scout sweep {scout.trace_id[:8]}: {len(scout.raw)} knots in "
            f"{1e3 * scout.time[-1]:.1f} ms, maximum power at {1e3 * maximum_s(scout):.2f} ms"
        )
    zero = trace.zero_voltage
    lines.append(
        f"  zeros: voltage {f'{zero.code:.2f}' if zero else 'of the profile, not read'}, "
        f"current {trace.zero_current.code:.2f} codes"
    )
    if bounces:
        lines.append(f"  contact opened again {bounces} times before it closed for good")
    return lines


def _figures(trace: Trace) -> tuple[Figures | None, str | None]:
    try:
        return trace.figures(), None
    except NoFigures as error:
        return None, error.reason


def _figure_lines(trace: Trace) -> list[str]:
    figures, reason = _figures(trace)
    if figures is None:
        return [f"  no figures: {reason}"]
    remarks = {
        "isc": f"extrapolated from {figures.isc_extrapolated_from_v:.2f} V "
        f"({100 * figures.isc_extrapolated_from_v / figures.voc.value:.1f} % of Voc)",
        "voc": "read just before closing",
    }
    source = " the emulated source itself:" if trace.truth else ""
    lines = [f"  {'':12}{'':14}{source}"] if source else []
    for name, shown in NAMES.items():
        quantity: Quantity = getattr(figures, name)
        line = f"  {shown:12}{quantity!s:>12}"
        if trace.truth:
            truth = trace.truth[name]
            off = 100 * (quantity.value / truth - 1) if truth else math.nan
            line += f"   {truth:10.4f} {quantity.unit:2}{off:+7.2f} %"
        if name in remarks:
            line += f"   {remarks[name]}"
        lines.append(line.rstrip())
    return lines
