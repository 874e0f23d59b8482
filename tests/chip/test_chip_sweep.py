"""A whole sweep: the host library, a serial port, the real firmware, an emulated RP2040."""

import contextlib
import threading
from math import exp
from typing import Any

import pytest
from chip import ROOT, Chip, Edge, missing

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

PULSE, RELAY, RELEASE = 2, 3, 4
VOC = 40.0


def source() -> dict[str, Any]:
    """A plain module on the reference board's scales."""
    volts = [VOC * n / 400 for n in range(401)]
    amperes = [9.2 - 2e-10 * (exp(u / 1.62) - 1) - u / 350 for u in volts]
    end = next((n for n, i in enumerate(amperes) if i <= 0), len(volts) - 1)
    return {
        "u_volt": volts[: end + 1],
        "i_ampere": [*amperes[:end], 0.0],
        "c_farad": 0.0022,
        "line_ohm": 0.07,
        "bleed_ohm": 100,
        "volt_per_code": [0.0165, 0.0165],
        "ampere_per_code": 0.0052,
        "zero_code": [24, 40, 24],
        "noise_code": 1.0,
        "seed": 3,
    }


def times(edges: list[Edge], pin: int, level: int) -> list[float]:
    return [edge.us for edge in edges if edge.pin == pin and edge.level == level]


def board(plant: dict[str, Any]) -> Chip:
    """A board with the reference profile, its firmware started."""
    from kneewire.profile_record import seal
    from kneewise.instrument.profile import BoardProfile

    profile = BoardProfile.load(ROOT / "device/profiles/reference.toml")
    chip = Chip(files={"/profile.bin": seal(profile.record(bytes(8)))}, plant=plant)
    chip.let_pass(4000)  # the firmware compiles itself at each start
    return chip


def test_a_sweep_is_right_and_its_outputs_keep_their_order() -> None:
    plant = source()
    with board(plant) as chip:
        from kneewise.instrument.tracer import Tracer

        with Tracer.open(chip.serial_port(), source_stands_alone=True) as tracer:
            chip.edges()
            trace = tracer.sweep(knots=96)
        edges = chip.edges()
        closings = chip.order("plant")["closings"]

    power = max(u * i for u, i in zip(plant["u_volt"], plant["i_ampere"], strict=True))
    assert max(trace.voltage * trace.current) == pytest.approx(power, rel=2e-3)
    assert len(trace.voltage) == 96

    first, last = times(edges, PULSE, 1)[0], times(edges, PULSE, 1)[-1]
    (released,), (relay_on,) = times(edges, RELEASE, 1), times(edges, RELAY, 1)
    relay_off, engaged = times(edges, RELAY, 0)[-1], times(edges, RELEASE, 0)[-1]
    assert released < relay_on < first < last < relay_off < engaged
    assert relay_on - released >= 20_000
    assert engaged - relay_off >= 20_000
    assert closings == 1, "the pulse ran out in mid-charge: the contact opened under load"


@pytest.mark.parametrize("delay_ms", [0, 60])
def test_a_forged_ctrl_c_in_mid_charge_ends_safe(delay_ms: int) -> None:
    with board({**source(), "c_farad": 0.022}) as chip:
        from kneewise.errors import KneewiseError
        from kneewise.instrument.tracer import Tracer

        forged: list[float] = []
        edges: list[Edge] = []

        def forge() -> None:
            while not times(edges, PULSE, 1):
                edges.extend(chip.edges())
            chip.let_pass(delay_ms)
            chip.order("forge", bytes=[3])
            forged.append(chip.now_us())
            chip.let_pass(200)
            edges.extend(chip.edges())

        with Tracer.open(chip.serial_port(), source_stands_alone=True) as tracer:
            chip.edges()
            other = threading.Thread(target=forge)
            other.start()
            with contextlib.suppress(KneewiseError):  # what the host makes of it is not asked here
                tracer.sweep(knots=96)
            other.join()
    assert times(edges, PULSE, 1)[-1] - forged[0] < 20_000
    last = {edge.pin: edge.level for edge in edges}
    assert last == {PULSE: 0, RELAY: 0, RELEASE: 0}
