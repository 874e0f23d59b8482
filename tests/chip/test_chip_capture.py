"""If these fail, a sweep outruns the firmware on the emulated RP2040, or its numbers are others.

`python tests/chip/figures.py` prints the figures that are only bounded here.
"""

import numpy as np
import pytest
from chip import missing
from figures import LASTING_MS, sweep_of, watched

from kneewise.emulator import process
from kneewise.emulator.opener import connector, profile_for, scaling_of, start
from kneewise.emulator.plant import Plant
from kneewise.emulator.scenario import Scenario
from kneewise.instrument.opened import Opened
from kneewise.instrument.trace import Trace
from kneewise.instrument.tracer import Tracer

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

RING_PAIRS = 4096
LAP_MARGIN = 64  # as in capture.py
PULSE_US = 5000
UPTIMES_US = {12: 0, 150: 1 << 30}  # from 2**30 us on a time is an object of its own


@pytest.mark.parametrize("ms", LASTING_MS)
def test_capture_keeps_up_and_allocates_nothing(ms: int) -> None:
    trace, found = watched(sweep_of(ms), uptime_us=UPTIMES_US[ms])
    assert trace.end_reason == "complete"
    assert trace.integrity.ring_overruns == 0
    assert trace.sound, trace.checks  # FCS.OVER clear is one of the checks
    assert trace.integrity.pairs * 4 >= 1000 * ms
    assert trace.integrity.pairs * 4 == pytest.approx(found["charge_us"], abs=3000)
    assert found["heap_locked"], "an allocation would have passed unnoticed"
    assert found["behind"] <= RING_PAIRS - LAP_MARGIN
    assert found["gap_us"] < PULSE_US
    assert found["free_armed"] > 65_536
    assert found["ready_us"] <= 60_000, "time of the chip, not of this machine"


def emulated_pairs(scenario: Scenario, count: int, phase_us: float) -> np.ndarray:
    """Codes of V and I, without noise and not rounded, (count, 2), that the emulator's plant gives
    from `phase_us` after the contact began to conduct.
    """
    plant = Plant(scenario.build_source(), scenario.build_circuit())
    plant.bleed_release(True)
    plant.relay(True)
    plant.advance_to(40_000)
    plant.pulse(10**9)
    instants = 40_000 + phase_us + 4.0 * np.arange(count)
    both = np.stack((instants, instants + 2.0), axis=1).ravel()
    volt, ampere, _ = plant.sample(both)
    scale = scaling_of(profile_for(scenario))
    v = volt[0::2] / scale.voltage_v_per_code + scale.voltage_zero_code
    i = ampere[1::2] / scale.current_a_per_code + scale.current_zero_code
    return np.stack((v, i), axis=1)


def astray(trace: Trace, pairs: np.ndarray) -> float:
    """Largest distance of a knot from the mean of the pairs that it stands for, in codes."""
    raw = trace.raw
    ends = np.cumsum(raw.pairs)
    sums = np.vstack(([0.0, 0.0], np.cumsum(pairs, axis=0)))
    means = (sums[ends] - sums[ends - raw.pairs]) / raw.pairs[:, None]
    found = np.stack((raw.voltage_sum, raw.current_sum), axis=1) / raw.pairs[:, None]
    return float(np.abs(found - means).max())


def process_sweep(scenario: Scenario) -> Trace:
    emulated = start(scenario, "micropython")
    try:
        opened = Opened(connect=connector(emulated), close=lambda: None, rung=emulated.rung)
        with Tracer(opened) as tracer:
            return tracer.sweep(knots=96)
    finally:
        emulated.close()


@pytest.mark.parametrize("ms", LASTING_MS)
@pytest.mark.skipif(not process.available(), reason="no MicroPython is packaged for this platform")
def test_every_knot_is_right_within_one_code_as_in_the_micropython_process(ms: int) -> None:
    """Where a knot ends depends on how long a rung captures after the end, so each knot is held
    against the pairs that it stands for. The contact closes at any place within a pair: that one
    number is found from the whole curve.
    """
    scenario = sweep_of(ms)
    for trace in (watched(scenario)[0], process_sweep(scenario)):
        count = trace.integrity.pairs
        phases = np.arange(0.0, 12.0, 0.25)  # the first pairs may be skipped
        assert min(astray(trace, emulated_pairs(scenario, count, p)) for p in phases) <= 1.0
