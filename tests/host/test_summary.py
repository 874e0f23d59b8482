"""What a sweep says on the terminal of its pairs kept one by one, its zeros and its contact."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from traces import make_trace

from kneewise.cli.summary import as_json, as_text
from kneewise.instrument.full_rate import FullRatePairs
from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import RawPairs, Reading, Trace

FILE, PICTURE = Path("a.parquet"), Path("a.png")


def kept(count: int, asked: int | None) -> FullRatePairs:
    codes = [np.zeros(count, np.uint16)] * 2
    return FullRatePairs(
        raw=RawPairs(250 if count else 0, *codes),
        asked=asked,
        pair_ns=4000,
        skew_ns=2000,
        scales=Scales(*[1.0] * 12, 4095, 1.0),
    )


def lines_of(trace: Trace) -> list[str]:
    return as_text(replace(trace, scenario=None), FILE, PICTURE).splitlines()


@pytest.mark.parametrize(
    ("pairs", "line"),
    [
        (kept(500, 500), "  500 raw pairs, 1.00 to 3.00 ms"),
        (kept(500, None), "  500 raw pairs, 1.00 to 3.00 ms"),
        (
            kept(500, 2000),
            "  500 raw pairs, 1.00 to 3.00 ms; 2000 were asked for, the sweep ended first",
        ),
        (kept(0, 2000), "  no raw pairs; 2000 were asked for, the sweep ended first"),
    ],
)
def test_how_many_pairs_and_which_stretch(pairs: FullRatePairs, line: str) -> None:
    trace = replace(make_trace(), full_rate=pairs)
    assert line in lines_of(trace)
    data = as_json(trace, FILE, PICTURE)["full_rate"]
    assert (data["pairs"], data["asked"]) == (len(pairs), pairs.asked)


def test_zeros_that_were_read_and_those_that_were_not() -> None:
    trace = make_trace()
    assert "  zeros: voltage of the profile, not read, current 20.01 codes" in lines_of(trace)
    assert as_json(trace, FILE, PICTURE)["zeros"]["voltage_code"] is None
    read = replace(trace, zero_voltage=Reading(2400, 100))
    assert "  zeros: voltage 24.00, current 20.01 codes" in lines_of(read)
    assert as_json(read, FILE, PICTURE)["zeros"]["voltage_code"] == 24.0


def test_a_contact_that_bounced_is_told() -> None:
    trace = make_trace()
    assert not any("contact" in line for line in lines_of(trace))
    bounced = replace(trace, integrity=replace(trace.integrity, bounces=3))
    assert "  contact opened again 3 times before it closed for good" in lines_of(bounced)
    assert as_json(bounced, FILE, PICTURE)["integrity"]["bounces"] == 3


def test_the_scout_by_its_name_and_its_maximum() -> None:
    trace = replace(make_trace(), scout=make_trace(knots=32))
    (line,) = (line for line in lines_of(trace) if "scout" in line)
    assert line.startswith("  steered by scout sweep 5d3c9b1e: 32 knots in ")
    data = as_json(trace, FILE, PICTURE)["scout"]
    assert f"maximum power at {1e3 * data['maximum_s']:.2f} ms" in line
    assert data["figures"]["isc"] == pytest.approx(9.19, rel=0.001)
