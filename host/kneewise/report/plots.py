"""One trace as one picture: I-V and P-V, the figures, and where the knots stand.

Comes in: a `Trace`. Goes out: a PNG or an SVG file. Only matplotlib's objects are used, never
pyplot with its shared state, so pictures can be made in several threads at once.
"""

from __future__ import annotations

import io
from datetime import UTC, datetime
from pathlib import Path
from typing import Any
from xml.sax.saxutils import escape

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle
from matplotlib.ticker import LogLocator, NullLocator, StrMethodFormatter

from kneewise.curve.figures import Figures
from kneewise.instrument.trace import Trace

# Dark blue drawn through and burnt orange broken: apart for the colour-blind and in grey.
_CURRENT_INK = "#14345c"
_POWER_INK = "#b35a00"
_PAIR_INK = "#a9bdd6"
_TEXT_INK = "#222222"
_GRID_INK = "#d5d5d5"
_FACE_INK = "#2b2b2b"
_WARNING_INK = "#8a1c1c"

# Room in the axes, in units of Isc, Voc and Pmp, so that labels find an empty place whatever
# the shape: Isc above the curve, Voc right of its end, the maximum in the upper right corner.
_TOP_OF_CURRENT = 1.24
_END_OF_VOLTAGE = 1.22
_TOP_OF_POWER = 1.62

# The drawing's columns, in shares of the picture's width.
_LEFT, _WIDTH = 0.1, 0.81
# Centre of the left axes' labels, in shares of the axes' width.
_LABEL_AT = -0.075


def curve_picture(trace: Trace, path: Path | str, *, dpi: int = 150) -> Path:
    """Draw `trace` into `path`, a PNG or an SVG by its suffix, and return the path.

    The picture carries a description in words (PNG text chunk, SVG title and description).
    Raises ValueError for another suffix and for a trace without knots, OSError where the file
    cannot be written.
    """
    path = Path(path)
    kind = path.suffix.lower().removeprefix(".")
    if kind not in ("png", "svg"):
        raise ValueError(f"a picture is a .png or a .svg file, not {path.name!r}")
    if len(trace.voltage) == 0:
        raise ValueError(f"trace {trace.trace_id} has no knots to draw")
    figures, why_none = _figures(trace)
    title = _title(trace)
    description = describe(trace)
    picture = Figure(figsize=(10.0, 7.6), facecolor="white")
    FigureCanvasAgg(picture)
    top = _draw_heading(picture, trace, title)
    curve = picture.add_axes((_LEFT, 0.31, _WIDTH, top - 0.025 - 0.31))
    strip = picture.add_axes((_LEFT, 0.175, _WIDTH, 0.095), sharex=curve)
    _draw_curve(curve, trace, figures, why_none)
    _draw_strip(strip, trace)
    _draw_notes(picture, trace, figures)
    buffer = io.BytesIO()
    if kind == "png":
        words = {"Title": title, "Description": description, "Software": "kneewise"}
        picture.savefig(buffer, format="png", dpi=dpi, metadata=words)
        content = buffer.getvalue()
    else:
        picture.savefig(buffer, format="svg", metadata={"Title": title, "Date": None})
        content = _with_words(buffer.getvalue().decode(), title, description).encode()
    path.write_bytes(content)
    return path


def describe(trace: Trace) -> str:
    """The picture in words, for those who cannot see it."""
    figures, why_none = _figures(trace)
    parts = [f"{_title(trace)}."]
    parts.append(
        f"Current over voltage, {len(trace.voltage)} knots from {trace.voltage[0]:.3g} V, "
        f"{trace.current[0]:.3g} A to {trace.voltage[-1]:.3g} V, {trace.current[-1]:.3g} A, "
        "and power over voltage."
    )
    if _pairs_in_words(trace):
        parts.append(f"Faint dots: {_pairs_in_words(trace)}.")
    if figures is None:
        parts.append(f"No figures: {why_none}.")
    else:
        parts.append(
            f"Isc {figures.isc}, Voc {figures.voc}, maximum power {figures.pmp} at {figures.vmp} "
            f"and {figures.imp}, fill factor {figures.ff}."
        )
    if not trace.sound:
        parts.append(f"Not to be trusted: {_failed(trace)}.")
    return " ".join(parts)


def _figures(trace: Trace) -> tuple[Figures | None, str]:
    try:
        return trace.figures(), ""
    except ValueError as error:
        return None, str(error)


def _title(trace: Trace) -> str:
    try:
        started = datetime.fromisoformat(trace.started_utc)
    except ValueError:
        when = trace.started_utc
    else:
        if started.tzinfo is not None:
            started = started.astimezone(UTC)
        when = f"{started:%Y-%m-%d %H:%M:%S} UTC"
    label = f"{trace.label} " if trace.label else ""
    return f"{label}I-V curve {trace.trace_id[:8]}, {when}, rung {trace.rung}"


def _failed(trace: Trace) -> str:
    return ", ".join(check.name for check in trace.checks if not check.holds)


def _draw_heading(picture: Figure, trace: Trace, title: str) -> float:
    """Title and bands; the height where the room below begins (0 to 1)."""
    plain = title.removeprefix(trace.label).strip()
    picture.text(_LEFT, 0.955, plain, fontsize=15, weight="bold", color=_TEXT_INK, va="center")
    top = 0.925
    if trace.label:
        top = _draw_band(picture, trace.label, top=top, height=0.058, ink=_FACE_INK, fontsize=24)
    if not trace.sound:
        text = f"Not to be trusted: {_shortened(_failed(trace), 80)}"
        top = _draw_band(picture, text, top=top, height=0.04, ink=_WARNING_INK, fontsize=13)
    return top


def _draw_band(
    picture: Figure, text: str, *, top: float, height: float, ink: str, fontsize: float
) -> float:
    """A filled band with white text; the height where the room below begins."""
    bottom = top - height
    picture.add_artist(Rectangle((_LEFT, bottom), _WIDTH, height, facecolor=ink, edgecolor="none"))
    picture.text(
        _LEFT + _WIDTH / 2.0,
        bottom + height / 2.0 - 0.002,
        text,
        fontsize=fontsize,
        weight="bold",
        color="white",
        ha="center",
        va="center",
    )
    return bottom - 0.008


def _draw_curve(axes: Axes, trace: Trace, figures: Figures | None, why_none: str) -> None:
    power = trace.voltage * trace.current
    isc = figures.isc.value if figures else float(trace.current.max())
    voc = figures.voc.value if figures else float(trace.voltage.max())
    pmp = figures.pmp.value if figures else float(power.max())
    axes.set_xlim(0.0, _END_OF_VOLTAGE * voc if voc > 0.0 else 1.0)
    axes.set_ylim(0.0, _TOP_OF_CURRENT * isc if isc > 0.0 else 1.0)
    axes.set_ylabel("Current (A), drawn through", color=_CURRENT_INK, fontsize=12)
    axes.yaxis.set_label_coords(_LABEL_AT, 0.5)
    axes.tick_params(labelsize=11, labelbottom=False)
    axes.tick_params(axis="y", colors=_CURRENT_INK)
    axes.grid(color=_GRID_INK, linewidth=0.7)
    axes.set_axisbelow(True)
    right = axes.twinx()
    right.set_ylim(0.0, _TOP_OF_POWER * pmp if pmp > 0.0 else 1.0)
    right.set_ylabel("Power (W), broken", color=_POWER_INK, fontsize=12)
    right.tick_params(axis="y", colors=_POWER_INK, labelsize=11)
    right.plot(trace.voltage, power, color=_POWER_INK, linewidth=1.6, linestyle=(0, (5, 2)))
    dot = 4.0 if len(trace.voltage) <= 150 else 2.0
    # On the upper axes as well, so that the I-V curve lies over the P-V curve.
    axes.set_zorder(right.get_zorder() + 1)
    axes.patch.set_visible(False)
    _draw_pairs(axes, trace)
    axes.plot(
        trace.voltage,
        trace.current,
        color=_CURRENT_INK,
        linewidth=1.0,
        marker="o",
        markersize=dot,
    )
    if figures is None:
        axes.text(
            0.5,
            0.965,
            _wrapped(f"No figures: {why_none}", 84),
            transform=axes.transAxes,
            fontsize=12,
            color=_WARNING_INK,
            ha="center",
            va="top",
            bbox={"facecolor": "white", "edgecolor": _WARNING_INK, "pad": 5.0},
        )
    else:
        _draw_figures(axes, right, trace, figures)


def _draw_pairs(axes: Axes, trace: Trace) -> None:
    """Raw pairs: faint dots under the curve, pixels in an SVG as well."""
    pairs = trace.full_rate
    if pairs is not None:
        faint: dict[str, Any] = {"linestyle": "", "marker": ".", "markersize": 9.0, "zorder": 1.5}
        faint |= {"markeredgewidth": 0.0, "rasterized": True}
        axes.plot(pairs.voltage, pairs.current, color=_PAIR_INK, **faint)


def _pairs_in_words(trace: Trace) -> str:
    pairs = trace.full_rate
    if pairs is None or not len(pairs):
        return ""
    begin_s, end_s = pairs.stretch_s
    return f"{len(pairs)} raw pairs, {1e3 * begin_s:.2f} to {1e3 * end_s:.2f} ms"


def _draw_figures(axes: Axes, right: Axes, trace: Trace, figures: Figures) -> None:
    """Isc, Voc and the maximum: a hollow mark where a value was carried on to, and its name."""
    hollow: dict[str, Any] = {
        "marker": "D",
        "markersize": 8.0,
        "markerfacecolor": "white",
        "markeredgewidth": 1.8,
        "zorder": 5,
    }
    isc, voc = figures.isc.value, figures.voc.value
    vmp, imp, pmp = figures.vmp.value, figures.imp.value, figures.pmp.value
    thin: dict[str, Any] = {"color": _CURRENT_INK, "linewidth": 1.1, "linestyle": ":"}
    axes.plot([0.0, trace.voltage[0]], [isc, trace.current[0]], **thin)
    axes.plot([trace.voltage[-1], voc], [trace.current[-1], 0.0], **thin)
    for v, i in ((0.0, isc), (voc, 0.0)):
        axes.plot([v], [i], color=_CURRENT_INK, clip_on=False, **hollow)
    axes.plot([vmp], [imp], color=_CURRENT_INK, **{**hollow, "marker": "s"})
    right.plot([vmp], [pmp], color=_POWER_INK, **{**hollow, "marker": "s"})
    words: dict[str, Any] = {"fontsize": 12, "color": _TEXT_INK}
    from_v = f"{figures.isc_extrapolated_from_v:.2g}"
    axes.annotate(
        f"Isc {figures.isc}, carried on to 0 V from {from_v} V",
        (0.0, isc),
        xytext=(9.0, 9.0),
        textcoords="offset points",
        **words,
    )
    axes.annotate(
        f"Voc\n{figures.voc}", (voc, 0.0), xytext=(10.0, 7.0), textcoords="offset points", **words
    )
    axes.annotate(
        f"Pmp {figures.pmp}\nat {figures.vmp}, {figures.imp}\nfill factor {figures.ff}",
        (vmp, imp),
        xytext=(0.985, 0.97),
        textcoords="axes fraction",
        ha="right",
        va="top",
        bbox={"facecolor": "white", "edgecolor": "none", "pad": 3.0},
        arrowprops={"arrowstyle": "-", "color": _TEXT_INK, "linewidth": 0.9, "shrinkB": 6.0},
        **words,
    )


def _draw_strip(axes: Axes, trace: Trace) -> None:
    """A stroke a knot at its voltage, as high as it has pairs: pairs come at an even pace."""
    weight = trace.weight
    axes.vlines(trace.voltage, 0.5, weight, color=_CURRENT_INK, linewidth=1.0)
    axes.set_yscale("log")
    axes.yaxis.set_major_locator(LogLocator(numticks=4))
    axes.yaxis.set_major_formatter(StrMethodFormatter("{x:.0f}"))
    axes.set_ylim(0.5, max(10.0, 2.0 * float(weight.max())))
    axes.set_ylabel("Pairs\nper knot", fontsize=11, color=_TEXT_INK)
    axes.yaxis.set_label_coords(_LABEL_AT, 0.5)
    axes.set_xlabel("Voltage (V)", fontsize=12, color=_TEXT_INK)
    axes.tick_params(labelsize=11)
    axes.yaxis.set_minor_locator(NullLocator())
    axes.grid(color=_GRID_INK, linewidth=0.7)
    axes.set_axisbelow(True)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)


def _draw_notes(picture: Figure, trace: Trace, figures: Figures | None) -> None:
    lasted = float(trace.time[-1] - trace.time[0])
    lines = [
        f"{len(trace.voltage)} knots of {int(np.sum(trace.weight))} pairs, "
        f"from {trace.time[0] * 1e3:.2f} ms after closing over {lasted * 1e3:.2f} ms"
    ]
    if _pairs_in_words(trace):
        lines[0] += f"; faint dots: {_pairs_in_words(trace)}"
    if figures is not None:
        each = ", ".join(
            f"{_NAMES[name]} {quantity.standard_uncertainty:.1g} {quantity.unit}".rstrip()
            for name, quantity in figures.named()
        )
        lines.append(f"Standard uncertainty by scatter alone: {each}")
    if trace.truth is not None:
        each = ", ".join(
            f"{_NAMES[name]} {trace.truth[name]:.5g} {unit}".rstrip()
            for name, unit in _UNITS.items()
            if name in trace.truth
        )
        lines.append(f"The emulated source itself: {each}")
    picture.text(
        0.03,
        0.092,
        "\n".join(lines),
        fontsize=9.5,
        color=_TEXT_INK,
        va="top",
        linespacing=1.45,
    )


_NAMES = {"isc": "Isc", "voc": "Voc", "imp": "Imp", "vmp": "Vmp", "pmp": "Pmp", "ff": "FF"}
_UNITS = {"isc": "A", "voc": "V", "imp": "A", "vmp": "V", "pmp": "W", "ff": ""}


def _shortened(text: str, length: int) -> str:
    return text if len(text) <= length else text[: length - 3] + "..."


def _wrapped(text: str, length: int) -> str:
    lines = [""]
    for word in text.split():
        if lines[-1] and len(lines[-1]) + len(word) >= length:
            lines.append("")
        lines[-1] = f"{lines[-1]} {word}".strip()
    return "\n".join(lines)


def _with_words(svg: str, title: str, description: str) -> str:
    """The SVG with a title and a description that a screen reader finds."""
    start = svg.index("<svg")
    end = svg.index(">", start)
    words = f"\n <title>{escape(title)}</title>\n <desc>{escape(description)}</desc>"
    return f'{svg[:end]} role="img">{words}{svg[end + 1 :]}'
