"""If these fail, the plant beside the emulated chip is another one than the emulator's.

It needs Node.js alone, no chip.
"""

import json
import shutil
import subprocess
from typing import Any

import numpy as np
import pytest
from chip import HERE

from kneewise.emulator.chip import plant_description
from kneewise.emulator.converters import Converters, Scaling
from kneewise.emulator.plant import Plant
from kneewise.emulator.scenario import Scenario

pytestmark = pytest.mark.skipif(
    shutil.which("node") is None, reason="install Node.js 20 or later: node was not found"
)

PULSE, RELAY, RELEASE = 2, 3, 4
EDGE_NS = 19_500  # half a period of the wave
CLOSE_US = 40_000
SCALING = Scaling()

VARIED = {
    "clear noon": {},
    "low sun": {"source": {"irradiance_w_m2": 20}},
    "dark": {"source": {"irradiance_w_m2": 0}},
    "small capacitor": {"load": {"capacitance_f": 100e-6}},
    "large capacitor": {"load": {"capacitance_f": 22e-3, "capacitor_esr_ohm": 0.01}},
    "long leads, worn capacitor": {"load": {"lead_resistance_ohm": 0.4, "capacitor_esr_ohm": 0.5}},
    "charged at the start": {"load": {"capacitor_start_v": 20.0}},
    "bleed open": {"board": {"bleed_open": True}, "load": {"capacitor_start_v": 20.0}},
    "welded": {"board": {"contact_welded": True}},
    "leads reversed": {"board": {"leads_reversed": True}},
}


class Walk:
    """One schedule for both plants; `codes` runs it."""

    def __init__(self, scenario: Scenario) -> None:
        self.scenario = scenario
        self.steps: list[tuple[Any, ...]] = []

    def charge(self, closed_us: int) -> None:
        """Bleed released, relay closed dry, the wave, and all open again."""
        self.steps += [
            ("pin", 0, PULSE, 0),
            ("pin", 1_000_000, RELEASE, 1),
            ("pin", 10_000_000, RELAY, 1),
        ]
        last = 1000 * (CLOSE_US + closed_us)
        edges = range(1000 * CLOSE_US, last, EDGE_NS)
        self.steps += [("pin", ns, PULSE, (n + 1) % 2) for n, ns in enumerate(edges)]
        self.last_us = edges[-1] / 1000
        self.steps += [
            ("pin", last + 10_000_000, RELAY, 0),
            ("pin", last + 30_000_000, RELEASE, 0),
        ]

    def look(self, from_us: int, to_us: int, every_us: int) -> None:
        """All three channels, in turn."""
        for number, us in enumerate(range(from_us, to_us, every_us)):
            self.steps.append(("code", 1000 * us, number % 3))

    def codes(self) -> tuple[np.ndarray, np.ndarray]:
        """Of plant.mjs and of plant.py."""
        steps = sorted(self.steps, key=lambda step: step[1])
        looks = [step for step in steps if step[0] == "code"]
        order = {"plant": plant_description(self.scenario, SCALING), "steps": steps}
        order["plant"]["noise_code"] = 0
        run = subprocess.run(
            ["node", str(HERE / "plant_walk.mjs")],
            input=json.dumps(order), capture_output=True, text=True, check=True,
        )  # fmt: skip
        beside = np.array(json.loads(run.stdout))
        return beside, self._emulated(steps, looks)

    def _emulated(self, steps: list[tuple[Any, ...]], looks: list[tuple[Any, ...]]) -> np.ndarray:
        plant = Plant(self.scenario.build_source(), self.scenario.build_circuit())
        found = []
        running = False
        for what, ns, first, *second in steps:
            us = ns // 1000
            if what == "code":
                values = plant.sample(np.array([float(us)]))
                found.append(float(values[first][0]))
                continue
            plant.advance_to(us)
            if what == "stop_loop":
                plant.stop_loop(bool(first))
            elif first == RELAY:
                plant.relay(second[0] == 1)
            elif first == RELEASE:
                plant.bleed_release(second[0] == 1)
            elif second[0] == 1 and not running:
                running = True
                plant.pulse(round(self.last_us) - us)  # its wave ends with the last edge
        scale = {
            0: (SCALING.voltage_v_per_code, SCALING.voltage_zero_code),
            1: (SCALING.current_a_per_code, SCALING.current_zero_code),
            2: (SCALING.capacitor_v_per_code, SCALING.capacitor_zero_code),
        }
        return np.array(
            [
                value / scale[look[2]][0] + scale[look[2]][1]
                for value, look in zip(found, looks, strict=True)
            ]
        )


@pytest.mark.parametrize("varied", VARIED.values(), ids=VARIED.keys())
def test_both_plants_agree_to_one_code(varied: dict[str, Any]) -> None:
    walk = Walk(Scenario.default().varied(**varied))
    walk.charge(12_000)
    walk.look(0, CLOSE_US, 997)
    walk.look(CLOSE_US + 2, CLOSE_US + 12_000, 2)
    walk.look(CLOSE_US + 12_100, CLOSE_US + 600_000, 1009)
    beside, emulated = walk.codes()
    assert len(beside) > 6000
    assert np.abs(np.clip(beside, 0, 4095) - np.clip(emulated, 0, 4095)).max() <= 1


def test_both_have_the_same_wide_codes() -> None:
    scenario = Scenario.default().varied(board={"adc_noise_codes": 0.0, "wide_code_lsb": 9.0})
    exact = np.arange(-1.0, 4097.0, 0.0625) + 0.01
    order = {
        "plant": plant_description(scenario, SCALING),
        "steps": [("widened", code) for code in exact],
    }
    run = subprocess.run(
        ["node", str(HERE / "plant_walk.mjs")],
        input=json.dumps(order), capture_output=True, text=True, check=True,
    )  # fmt: skip
    beside = np.clip(np.round(json.loads(run.stdout)), 0, 4095)
    volts = (exact - SCALING.voltage_zero_code) * SCALING.voltage_v_per_code
    assert np.array_equal(beside, Converters(scenario, SCALING).codes(0, volts))


def test_both_plants_lose_all_drive_with_the_stop_loop() -> None:
    walk = Walk(Scenario.default().varied(load={"capacitance_f": 22e-3}))
    walk.charge(12_000)
    walk.steps.append(("stop_loop", 1000 * (CLOSE_US + 4001), 0))
    walk.look(CLOSE_US + 2, CLOSE_US + 3998, 2)
    walk.look(CLOSE_US + 4100, CLOSE_US + 200_000, 101)
    beside, emulated = walk.codes()
    assert np.abs(beside - emulated).max() <= 1
