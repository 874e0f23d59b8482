"""One command's worth: arm, fire, capture, bleed, fetch, with figures near the truth.

The modules are rows of the CEC table that pvlib ships (from the System Advisor Model of NREL),
by index, reference parameters at 25 degC and 1000 W/m2; no names are taken over.
"""

import numpy as np
import pvlib
import pytest
from rig import knots_alike

MODULES = 20


@pytest.fixture(scope="session")
def modules():
    """Single-diode parameters of MODULES rows, Voc 15 to 60 V, evenly through the table."""
    table = pvlib.pvsystem.retrieve_sam("CECMod").T
    table = table[["I_L_ref", "I_o_ref", "R_s", "R_sh_ref", "a_ref", "V_oc_ref", "I_sc_ref"]]
    table = table.astype(float)
    table = table[table.V_oc_ref.between(15.0, 59.0) & table.I_sc_ref.between(1.0, 19.0)]
    table = table.sort_values("V_oc_ref")
    rows = table.iloc[np.linspace(0, len(table) - 1, MODULES).round().astype(int)]
    return [
        {
            "photocurrent_a": row.I_L_ref,
            "saturation_current_a": row.I_o_ref,
            "n_ns_vt_v": row.a_ref,
            "series_resistance_ohm": row.R_s,
            "shunt_resistance_ohm": row.R_sh_ref,
        }
        for row in rows.itertuples()
    ]


@pytest.mark.parametrize("index", range(MODULES))
def test_figures_meet_the_truth_of_the_plant(index, modules, bench, rung):
    """A technician would write down a wrong Isc, Voc or Pmp."""
    one = bench(rung, source=modules[index], seed=index)
    trace = one.tracer().sweep(knots=96)
    truth = one.emulated.scenario.build_source().truth()
    assert trace.sound, [check for check in trace.checks if not check.holds]
    figures = trace.figures()
    assert one.emulated.scenario.board.adc_noise_codes == pytest.approx(1.2)
    assert one.emulated.scenario.bank.capacitance_f == pytest.approx(2.2e-3)
    for name in ("isc", "voc", "pmp"):
        assert getattr(figures, name).value == pytest.approx(truth[name], rel=0.005), name


@pytest.mark.parametrize("seed", [1, 7, 2026])
def test_both_rungs_give_the_same_knots(seed, bench):
    """A fault found on one rung could not be repeated on the other."""
    from kneewise.emulator import process

    if not process.available():
        pytest.skip("no MicroPython is packaged for this platform, so there is one rung only")
    traces = [bench(rung, seed=seed).tracer().sweep() for rung in ("in-process", "micropython")]
    assert knots_alike(*traces)


def test_same_seed_same_bytes_in_process(bench):
    """Emulated sweeps could not be told apart from chance."""
    one, two = (bench("in-process", seed=11).tracer().sweep() for _ in range(2))
    assert (one.raw.time_us == two.raw.time_us).all()
    assert knots_alike(one, two)
    other = bench("in-process", seed=12).tracer().sweep()
    assert not knots_alike(one, other)


@pytest.mark.parametrize("knots", [16, 64, 512])
def test_as_many_knots_as_asked_for(knots, bench, rung):
    trace = bench(rung).tracer().sweep(knots=knots)
    assert len(trace.raw) == knots
    assert int(trace.raw.pairs.sum()) == trace.integrity.pairs


def test_knots_stand_denser_at_the_knee(bench, rung):
    """With points equally spaced the bend would be cut."""
    trace = bench(rung).tracer().sweep(knots=96)
    voc = trace.voc_static
    flat = np.count_nonzero(trace.voltage < 0.4 * voc) / 0.4
    knee = np.count_nonzero((trace.voltage > 0.75 * voc) & (trace.voltage < 0.95 * voc)) / 0.2
    assert knee > 3 * flat


def test_a_dim_source_sweeps_long_and_is_heard_of(bench, rung):
    """A charge that outlasts 2 s needs heartbeats, or the sweep ends as "host lost"."""
    one = bench(rung, source={"photocurrent_a": 0.05})
    trace = one.tracer().sweep(limit_s=20.0)
    assert trace.end_reason == "complete"
    assert trace.time[-1] > 2.0
    truth = one.emulated.scenario.build_source().truth()
    assert trace.figures().pmp.value == pytest.approx(truth["pmp"], rel=0.05)


def test_many_sweeps_in_a_row(bench, rung):
    """Memory that leaks on the device ends a campaign."""
    tracer = bench(rung).tracer()
    ids = {tracer.sweep(knots=128).trace_id for _ in range(25)}
    assert len(ids) == 25
