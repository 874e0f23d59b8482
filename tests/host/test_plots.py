"""The picture of a trace: readable whatever the shape, and EMULATED where it is."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import matplotlib.image
import matplotlib.pyplot
import numpy as np
import pytest
from matplotlib.figure import Figure
from matplotlib.text import Annotation, Text
from PIL import Image
from traces import Source, make_trace

from kneewise.instrument.full_rate import FullRatePairs
from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import Check, RawPairs, Trace
from kneewise.report import plots
from kneewise.report.plots import curve_picture, describe


def source(voc: float, isc: float, fill_factor: float) -> Source:
    """An invented source with this fill factor, reached by its series resistance."""
    thermal = voc / 25.0
    low, high = 0.0, 0.5
    for _ in range(30):
        middle = (low + high) / 2.0
        made = Source(
            isc, isc / np.expm1(voc / thermal), middle * voc / isc, 40.0 * voc / isc, thermal
        )
        low, high = (middle, high) if made.truth()["ff"] > fill_factor else (low, middle)
    return made


SHAPES = [
    (voc, isc, fill_factor)
    for voc in (15.0, 60.0)
    for isc in (0.5, 15.0)
    for fill_factor in (0.55, 0.8)
]


@pytest.fixture
def drawn(monkeypatch: pytest.MonkeyPatch) -> list[Figure]:
    """The figures that `curve_picture` saves, for a look at what stands where."""
    figures: list[Figure] = []
    original = Figure.savefig

    def keep(figure: Figure, *arguments: Any, **options: Any) -> None:
        figures.append(figure)
        original(figure, *arguments, **options)

    monkeypatch.setattr(Figure, "savefig", keep)
    return figures


def texts(figure: Figure) -> list[str]:
    return [text.get_text() for text in figure.findobj(Text) if text.get_text()]


@pytest.mark.parametrize("shape", SHAPES, ids=str)
def test_labels_lie_apart_from_the_curves_and_from_each_other(
    shape: tuple[float, float, float], tmp_path: Path, drawn: list[Figure]
) -> None:
    trace = make_trace(source(*shape), knots=96)
    curve_picture(trace, tmp_path / "curve.png", dpi=60)
    (figure,) = drawn
    figure.draw_without_rendering()
    axes, _strip, right = figure.axes
    boxes = {text.get_text(): Text.get_window_extent(text) for text in axes.texts}
    assert [text.split()[0] for text in boxes] == ["Isc", "Voc", "Pmp"]
    assert all(isinstance(text, Annotation) for text in axes.texts)
    for text, box in boxes.items():
        for panel, values in ((axes, trace.current), (right, trace.voltage * trace.current)):
            points = panel.transData.transform(np.column_stack((trace.voltage, values)))
            inside = box.contains
            assert not any(inside(x, y) for x, y in points), text
        assert axes.get_window_extent().padded(1.0).contains(box.x0, box.y0), text
        assert axes.get_window_extent().padded(1.0).contains(box.x1, box.y1), text
        others = [other for name, other in boxes.items() if name != text]
        assert not any(box.overlaps(other) for other in others), text
    for words in figure.texts:
        assert words.get_window_extent().x1 < figure.bbox.x1, words.get_text()


def test_the_picture_names_its_figures_and_where_isc_comes_from(
    tmp_path: Path, drawn: list[Figure]
) -> None:
    trace = make_trace()
    curve_picture(trace, tmp_path / "curve.png", dpi=60)
    figures = trace.figures()
    words = "\n".join(texts(drawn[0]))
    from_v = f"{figures.isc_extrapolated_from_v:.2g}"
    assert f"Isc {figures.isc}, carried on to 0 V from {from_v} V" in words
    assert f"Voc\n{figures.voc}" in words
    assert f"Pmp {figures.pmp}\nat {figures.vmp}, {figures.imp}" in words
    assert "2031-05-06 10:20:30 UTC, rung in-process" in words
    assert "96 knots of 4000 pairs" in words
    assert "Standard uncertainty by scatter alone" in words
    assert "The emulated source itself: Isc 9.1908 A" in words


def test_emulated_stands_large_on_the_face_and_a_real_trace_does_not_carry_it(
    tmp_path: Path, drawn: list[Figure]
) -> None:
    trace = make_trace()
    curve_picture(trace, tmp_path / "curve.png", dpi=60)
    curve_picture(
        replace(trace, emulated=False, truth=None, rung="tracer"), tmp_path / "real.png", dpi=60
    )
    emulated, real = drawn
    (band,) = (text for text in emulated.texts if text.get_text() == "EMULATED")
    assert float(band.get_fontsize()) >= 20
    assert band.get_color() == "white"
    assert not any("EMULATED" in text or "emulated" in text for text in texts(real))
    # Dark ink behind the word: the band is there in the pixels, not only in the objects.
    pixels = matplotlib.image.imread(tmp_path / "curve.png")[..., :3].mean(axis=2)
    assert (pixels < 0.25).mean(axis=1).max() > 0.6


def test_pairs_kept_one_by_one_are_faint_dots_under_the_curve(
    tmp_path: Path, drawn: list[Figure]
) -> None:
    trace = make_trace()
    codes = (np.linspace(*ends, 400).astype(np.uint16) for ends in ((2000, 2400), (1700, 1500)))
    kept = FullRatePairs(
        raw=RawPairs(1625, *codes),
        asked=400,
        pair_ns=4000,
        skew_ns=2000,
        scales=Scales(0.0165, 24, 0.0052, 40, 1, 1, 0.0, 0.0, 1e6, 0.0, 1, 12.0, 4095, 1.0),
    )
    pictured = replace(trace, full_rate=kept)
    curve_picture(pictured, tmp_path / "pairs.svg", dpi=60)
    axes = drawn[0].axes[0]
    dots, curve = axes.lines[0], axes.lines[1]
    assert dots.get_xdata().tolist() == kept.voltage.tolist()
    assert dots.get_ydata().tolist() == kept.current.tolist()
    assert dots.get_zorder() < curve.get_zorder()
    assert luminance(str(dots.get_color())) > 3.0 * luminance(str(curve.get_color()))
    said = "400 raw pairs, 6.50 to 8.10 ms"
    assert f"; faint dots: {said}" in "\n".join(texts(drawn[0]))
    assert f"Faint dots: {said}." in describe(pictured)
    for words in drawn[0].texts:
        assert words.get_window_extent().x1 < drawn[0].bbox.x1, words.get_text()
    # As pixels: two thousand dots as shapes make a file that no browser likes.
    assert (tmp_path / "pairs.svg").stat().st_size < 200_000
    none = replace(trace, full_rate=replace(kept, raw=RawPairs(0, *[np.zeros(0, np.uint16)] * 2)))
    curve_picture(none, tmp_path / "none.png", dpi=60)
    assert "raw pairs" not in describe(none)


def test_failed_checks_stand_on_the_face(tmp_path: Path, drawn: list[Figure]) -> None:
    failed = (Check("ring overruns", False, "3", "0"), Check("voltage drift", True, "0", "0"))
    trace = replace(make_trace(), checks=failed)
    curve_picture(trace, tmp_path / "curve.png", dpi=60)
    assert "Not to be trusted: ring overruns" in texts(drawn[0])
    assert describe(trace).endswith("Not to be trusted: ring overruns.")


def cut_short(trace: Trace) -> Trace:
    keep = trace.voltage < 30.0
    columns = ("voltage", "current", "time", "weight", "voltage_sigma", "current_sigma")
    return replace(trace, **{name: getattr(trace, name)[keep] for name in columns})


def test_a_trace_without_figures_is_drawn_with_the_reason(
    tmp_path: Path, drawn: list[Figure]
) -> None:
    trace = make_trace()
    dark = replace(trace, current=np.zeros_like(trace.current))
    for each, reason in ((cut_short(trace), "without passing"), (dark, "gives no power")):
        curve_picture(each, tmp_path / "curve.png", dpi=60)
        words = " ".join(texts(drawn.pop())).replace("\n", " ")
        assert "No figures:" in words
        assert reason in words
        assert reason in describe(each)


@pytest.mark.parametrize("count", [1, 2, 8, 512])
def test_any_number_of_knots_can_be_drawn(count: int, tmp_path: Path) -> None:
    trace = make_trace(knots=512 if count == 512 else 32)
    columns = ("voltage", "current", "time", "weight", "voltage_sigma", "current_sigma")
    few = replace(trace, **{name: getattr(trace, name)[:count] for name in columns})
    assert curve_picture(few, tmp_path / "curve.png", dpi=50).stat().st_size > 5000


def test_the_png_carries_its_words_and_its_resolution(tmp_path: Path) -> None:
    trace = make_trace()
    with Image.open(curve_picture(trace, tmp_path / "curve.PNG", dpi=100)) as image:
        assert image.size == (1000, 760)
        assert image.info["Title"].startswith("EMULATED I-V curve 5d3c9b1e")
        assert image.info["Description"] == describe(trace)
    assert f"maximum power {trace.figures().pmp}" in describe(trace)


def test_the_svg_carries_title_and_description(tmp_path: Path) -> None:
    trace = replace(make_trace(), rung="<in & out>")
    root = ElementTree.parse(curve_picture(trace, tmp_path / "curve.svg")).getroot()
    space = "{http://www.w3.org/2000/svg}"
    assert root.attrib["role"] == "img"
    assert [child.tag for child in root][:2] == [f"{space}title", f"{space}desc"]
    assert root.findtext(f"{space}title", "").startswith("EMULATED I-V curve")
    assert root.findtext(f"{space}desc") == describe(trace)


def test_other_suffixes_and_empty_traces_are_refused(tmp_path: Path) -> None:
    trace = make_trace()
    with pytest.raises(ValueError, match=r"a picture is a \.png or a \.svg file, not 'curve.pdf'"):
        curve_picture(trace, tmp_path / "curve.pdf")
    columns = ("voltage", "current", "time", "weight", "voltage_sigma", "current_sigma")
    empty = replace(trace, **{name: getattr(trace, name)[:0] for name in columns})
    with pytest.raises(ValueError, match="has no knots to draw"):
        curve_picture(empty, tmp_path / "curve.png")
    assert list(tmp_path.iterdir()) == []


def test_pictures_can_be_made_in_threads_and_leave_no_shared_state(tmp_path: Path) -> None:
    trace = make_trace(knots=32)
    paths = [tmp_path / f"{number}.png" for number in range(6)]
    with ThreadPoolExecutor(3) as pool:
        list(pool.map(lambda path: curve_picture(trace, path, dpi=60), paths))
    assert len({path.read_bytes() for path in paths}) == 1
    assert matplotlib.pyplot.get_fignums() == []


def luminance(ink: str) -> float:
    """Relative luminance of an sRGB colour, WCAG 2.1."""
    parts = np.array([int(ink[at : at + 2], 16) for at in (1, 3, 5)]) / 255.0
    linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


def test_inks_keep_their_contrast_on_white_and_apart_in_grey() -> None:
    for ink in (plots._CURRENT_INK, plots._POWER_INK, plots._TEXT_INK, plots._WARNING_INK):
        assert 1.05 / (luminance(ink) + 0.05) >= 4.5, ink
    apart = (luminance(plots._POWER_INK) + 0.05) / (luminance(plots._CURRENT_INK) + 0.05)
    assert apart > 2.0
