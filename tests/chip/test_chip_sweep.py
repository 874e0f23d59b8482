"""A whole sweep: the host library, a serial port, the real firmware, an emulated RP2040."""

import pytest
from chip import Edge, missing
from on_chip import chip_for, tracer_on

from kneewise.emulator.scenario import Scenario

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

PULSE, RELAY, RELEASE = 2, 3, 4
DEAD_US = 20_000


def times(edges: list[Edge], pin: int, level: int) -> list[float]:
    return [edge.us for edge in edges if edge.pin == pin and edge.level == level]


def test_a_sweep_is_right_and_its_outputs_keep_their_order() -> None:
    scenario = Scenario.default()
    with chip_for(scenario) as made:
        with tracer_on(made) as tracer:
            made.chip.edges()
            trace = tracer.sweep(knots=96)
        edges = made.chip.edges()
        plant = made.chip.order("plant")

    truth = scenario.build_source().truth()
    figures = trace.figures()
    assert figures.pmp.value == pytest.approx(truth["pmp"], rel=1e-3)
    assert figures.voc.value == pytest.approx(truth["voc"], rel=1e-3)
    assert figures.isc.value == pytest.approx(truth["isc"], rel=1e-3)
    assert len(trace.voltage) == 96
    assert trace.sound, trace.checks

    first, last = times(edges, PULSE, 1)[0], times(edges, PULSE, 1)[-1]
    (released,), (relay_on,) = times(edges, RELEASE, 1), times(edges, RELAY, 1)
    relay_off, engaged = times(edges, RELAY, 0)[-1], times(edges, RELEASE, 0)[-1]
    assert released < relay_on < first < last < relay_off < engaged
    assert relay_on - released >= DEAD_US
    assert engaged - relay_off >= DEAD_US
    assert plant["closings"] == 1, "the pulse ran out in mid-charge: the contact opened under load"
    assert plant["overlap_ns"] == 0


def test_a_sweep_by_two_spi_converters_at_pin_level() -> None:
    """From select and clock to the figures: some 8000 edges a millisecond, each at its own time."""
    scenario = Scenario.default().varied(board={"converter": "spi16"})
    with chip_for(scenario) as made:
        with tracer_on(made) as tracer:
            trace = tracer.sweep(knots=96)
        converters = made.chip.order("plant")["spi"]
    truth = scenario.build_source().truth()
    figures = trace.figures()
    assert figures.pmp.value == pytest.approx(truth["pmp"], rel=2e-4)
    assert figures.voc.value == pytest.approx(truth["voc"], rel=2e-4)
    assert figures.isc.value == pytest.approx(truth["isc"], rel=2e-4)
    assert trace.sound, trace.checks
    assert converters["early"] == 0
    assert (trace.raw.voltage_sum / trace.raw.pairs).max() > 4095
