"""What comes from a replay says so wherever it is met: on the trace, its file and its picture."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import pyarrow.parquet as pq
import pytest
from matplotlib.figure import Figure
from PIL import Image
from traces import make_trace

from kneewise.archive.store import load, save
from kneewise.cli.summary import as_json, as_text
from kneewise.instrument.trace import Trace
from kneewise.report.plots import curve_picture, describe

FACES = [(True, "EMULATED, REPLAYED"), (False, "REPLAYED")]


def replayed(emulated: bool) -> Trace:
    return replace(make_trace(), rung="replay", emulated=emulated, truth=None, scenario=None)


@pytest.mark.parametrize(("emulated", "label"), FACES)
def test_the_label(emulated: bool, label: str) -> None:
    assert replayed(emulated).label == label
    assert make_trace(rung="tracer", emulated=False).label == ""
    assert make_trace(rung="emulator", emulated=True).label == "EMULATED"


@pytest.mark.parametrize(("emulated", "label"), FACES)
def test_the_file_carries_it_in_its_name_and_its_metadata(
    emulated: bool, label: str, tmp_path: Path
) -> None:
    trace = replayed(emulated)
    path = save(trace, tmp_path)
    assert path.name == f"20310506T102030Z-5d3c9b1e-{label.replace(', ', '-')}.parquet"
    head = json.loads(pq.read_schema(path).metadata[b"kneewise"])
    assert (head["label"], head["rung"], head["emulated"]) == (label, "replay", emulated)
    assert load(path).label == label


@pytest.mark.parametrize(("emulated", "label"), FACES)
def test_the_picture_carries_it_large_and_in_words(
    emulated: bool, label: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    drawn: list[Figure] = []
    original = Figure.savefig

    def keep(figure: Figure, *arguments: object, **options: object) -> None:
        drawn.append(figure)
        original(figure, *arguments, **options)  # type: ignore[arg-type]

    monkeypatch.setattr(Figure, "savefig", keep)
    trace = replayed(emulated)
    curve_picture(trace, tmp_path / "curve.png", dpi=60)
    (figure,) = drawn
    (band,) = (text for text in figure.texts if text.get_text() == label)
    assert float(band.get_fontsize()) >= 20
    box = band.get_window_extent()
    assert figure.bbox.x0 < box.x0
    assert box.x1 < figure.bbox.x1
    with Image.open(tmp_path / "curve.png") as image:
        assert image.info["Title"].startswith(f"{label} I-V curve 5d3c9b1e")
    assert describe(trace).startswith(f"{label} I-V curve")


@pytest.mark.parametrize(("emulated", "label"), FACES)
def test_the_summary_and_the_object_carry_it(emulated: bool, label: str) -> None:
    trace = replayed(emulated)
    text = as_text(trace, Path("a.parquet"), Path("a.png"))
    assert text.startswith(f"{label}: sweep 5d3c9b1e, 2031-05-06 10:20:30 UTC\n")
    assert "a recording, replayed; nothing was measured anew" in text
    data = as_json(trace, Path("a.parquet"), Path("a.png"))
    assert (data["label"], data["rung"], data["emulated"]) == (label, "replay", emulated)
