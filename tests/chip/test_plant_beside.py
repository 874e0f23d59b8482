"""If these fail, the plant beside the emulated chip is another one than the emulator's.

It needs Node.js alone, no chip.
"""

import contextlib
import json
import shutil
import subprocess
from typing import Any, NamedTuple

import numpy as np
import pytest
from chip import HERE

from kneewise.emulator.board import Board, PowerLost
from kneewise.emulator.chip import plant_description, source_table
from kneewise.emulator.converters import Converters, Scaling
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
    "charged above the source": {"load": {"capacitor_start_v": 45.0}},
    "bleed open": {"board": {"bleed_open": True}, "load": {"capacitor_start_v": 20.0}},
    "worn capacitor, shorted bleed": {
        "load": {
            "capacitance_of_nominal": 0.4,
            "bleed_of_nominal": 0.001,
            "capacitor_start_v": 20.0,
        }
    },
    "switch shorted": {"board": {"switch_shorted": True}},
    "relay welded": {"board": {"relay_welded": True}},
    "welded with a shorted bleed": {
        "board": {"contact_welded": True},
        "load": {"bleed_of_nominal": 0.001},
    },
    "welded": {"board": {"contact_welded": True}},
    "leads reversed": {"board": {"leads_reversed": True}},
    "channels off": {
        "board": {
            "voltage_gain_error": 0.02,
            "voltage_offset_codes": 60.0,
            "current_gain_error": -0.03,
            "current_offset_codes": -30.0,
        }
    },
}


class Found(NamedTuple):
    """Codes that are not rounded, the record, J of the bleed, and (us, A) of hot openings."""

    codes: np.ndarray
    record: list[tuple[int, str, int | None]]
    bleed_j: float
    hot: list[tuple[int, float]]


def walked(order: dict[str, Any]) -> dict[str, Any]:
    run = subprocess.run(
        ["node", str(HERE / "plant_walk.mjs")],
        input=json.dumps(order), capture_output=True, text=True, check=True,
    )  # fmt: skip
    return dict(json.loads(run.stdout))


class Walk:
    """One schedule for both plants; `run` walks it."""

    def __init__(self, scenario: Scenario) -> None:
        self.scenario = scenario
        self.steps: list[tuple[Any, ...]] = []

    def wave(self, from_us: int, us: int) -> None:
        """Its edges; `last_us` is the time of the last."""
        edges = range(1000 * from_us, 1000 * (from_us + us), EDGE_NS)
        self.steps += [("pin", ns, PULSE, (n + 1) % 2) for n, ns in enumerate(edges)]
        self.last_us = edges[-1] / 1000

    def charge(self, closed_us: int) -> None:
        """Bleed released, relay closed dry, the wave, and all open again."""
        self.steps += [
            ("pin", 0, PULSE, 0),
            ("pin", 1_000_000, RELEASE, 1),
            ("pin", 10_000_000, RELAY, 1),
        ]
        last = 1000 * (CLOSE_US + closed_us)
        self.wave(CLOSE_US, closed_us)
        self.steps += [
            ("pin", last + 10_000_000, RELAY, 0),
            ("pin", last + 30_000_000, RELEASE, 0),
        ]

    def look(self, from_us: int, to_us: int, every_us: int) -> None:
        """All three channels, in turn."""
        for number, us in enumerate(range(from_us, to_us, every_us)):
            self.steps.append(("code", 1000 * us, number % 3))

    def mishap(self, delay_us: int, what: str, value: Any = 1) -> None:
        """Some time after the closing."""
        self.steps.append(("after_closing", 0, delay_us, what, value))

    def run(self) -> tuple[Found, Found]:
        """Of plant.mjs and of plant.py."""
        steps = sorted(self.steps, key=lambda step: step[1])
        beside = [(*step[:4], self._beside(*step[3:])) if step[0] == "after_closing" else step
                  for step in steps]  # fmt: skip
        order = {"plant": plant_description(self.scenario, SCALING), "steps": beside}
        order["plant"]["noise_code"] = 0
        found = walked(order)
        record = [tuple(entry) for entry in found["record"]]
        state = found["state"]
        hot = [tuple(entry) for entry in state["hot_openings"]]
        return (
            Found(np.array(found["codes"]), record, state["bleed_j"], hot),
            self._emulated(steps),
        )

    def _beside(self, what: str, value: Any) -> Any:
        return source_table(self.scenario.varied(source=value)) if what == "source" else value

    def _emulated(self, steps: list[tuple[Any, ...]]) -> Found:
        """By the board, whose converters are not asked: codes are exact."""
        board = Board(self.scenario, clock=lambda: 0.0)
        board.quiet(True)
        plant = board._plant
        codes = []
        running = False
        for what, ns, *words in steps:
            us = ns // 1000
            with contextlib.suppress(PowerLost):
                board.wait(max(0, us - board.virtual_us))
            if what == "code":
                stuck = board._converters.stuck[words[0]]
                value = float(plant.sample(np.array([float(us)]))[words[0]][0])
                channel = board._converters._channels[words[0]]
                exact = channel.zero_code + value * channel.codes_per_unit
                codes.append(exact if stuck is None else stuck)
            elif what == "after_closing":
                board.after_closing(*words)
            elif what == "change":
                board.change(*words)
            elif words[0] == RELAY:
                board.relay(words[1])
            elif words[0] == RELEASE:
                board.bleed_release(words[1])
            elif words[1] == 0 and not running:
                board.pulse(0)
            elif words[1] == 1 and not running:
                running = True
                board.pulse(round(self.last_us) - us)  # its wave ends with the last edge
        return Found(np.array(codes), list(board.record), board.bleed_energy_j, board.hot_openings)


def alike(walk: Walk) -> tuple[Found, Found]:
    """What both have found, the same within a code, an edge of the wave and a thousandth."""
    beside, emulated = walk.run()
    apart = np.abs(np.clip(beside.codes, 0, 4095) - np.clip(emulated.codes, 0, 4095))
    assert apart.max() <= 1
    assert [entry[1:] for entry in beside.record] == [entry[1:] for entry in emulated.record]
    for one, other in zip(beside.record, emulated.record, strict=True):
        assert abs(one[0] - other[0]) <= 1, (one, other)
    assert beside.bleed_j == pytest.approx(emulated.bleed_j, rel=1e-3, abs=1e-6)
    assert len(beside.hot) == len(emulated.hot)
    for one, other in zip(beside.hot, emulated.hot, strict=True):
        assert one == pytest.approx(other, rel=1e-3, abs=1)
    return beside, emulated


@pytest.mark.parametrize("varied", VARIED.values(), ids=VARIED.keys())
def test_both_plants_agree_to_one_code(varied: dict[str, Any]) -> None:
    walk = Walk(Scenario.default().varied(**varied))
    walk.charge(12_000)
    walk.look(0, CLOSE_US, 997)
    walk.look(CLOSE_US + 2, CLOSE_US + 12_000, 2)
    walk.look(CLOSE_US + 12_100, CLOSE_US + 600_000, 1009)
    beside, _ = alike(walk)
    assert len(beside.codes) > 6000


def test_both_have_the_same_wide_codes() -> None:
    scenario = Scenario.default().varied(board={"adc_noise_codes": 0.0, "wide_code_lsb": 9.0})
    exact = np.arange(-1.0, 4097.0, 0.0625) + 0.01
    order = {
        "plant": plant_description(scenario, SCALING),
        "steps": [("widened", code) for code in exact],
    }
    beside = np.clip(np.round(walked(order)["codes"]), 0, 4095)
    volts = (exact - SCALING.voltage_zero_code) * SCALING.voltage_v_per_code
    assert np.array_equal(beside, Converters(scenario, SCALING).codes(0, volts))


def test_both_plants_lose_all_drive_with_the_stop_loop() -> None:
    walk = Walk(Scenario.default().varied(load={"capacitance_f": 22e-3}))
    walk.charge(12_000)
    walk.steps.append(("change", 1000 * (CLOSE_US + 4001), "stop_loop", 1))
    walk.look(CLOSE_US + 2, CLOSE_US + 3998, 2)
    walk.look(CLOSE_US + 4100, CLOSE_US + 200_000, 101)
    beside, emulated = walk.run()
    assert np.abs(beside.codes - emulated.codes).max() <= 1


def bare(seed: int, bounce_ms: float = 5.0, **load: float) -> Walk:
    """A relay build: the wave has the coil, and ends under load."""
    board = {"contact": "relay", "bounce_ms": bounce_ms}
    walk = Walk(Scenario.default().varied(seed=seed, board=board, load=load))
    walk.steps += [("pin", 0, PULSE, 0), ("pin", 1_000_000, RELEASE, 1)]
    walk.wave(CLOSE_US, 20_000)
    walk.look(0, CLOSE_US + 100_000, 53)
    return walk


@pytest.mark.parametrize("seed", range(6))
def test_a_bare_relay_bounces_at_the_same_moments_in_both(seed: int) -> None:
    beside, _ = alike(bare(seed, capacitance_f=22e-3))
    moves = [level for _, what, level in beside.record if what == "relay_contact"]
    assert len(moves) >= 4
    assert moves[0] == 1
    assert moves[-1] == 0
    assert len(beside.hot) == len(moves) // 2


def test_both_only_sense_the_stop_loop_of_a_bare_relay() -> None:
    walk = bare(1, bounce_ms=0.0)
    walk.steps.append(("change", 1000 * (CLOSE_US + 10_001), "stop_loop", 1))
    beside, _ = alike(walk)
    moved = [entry[0] for entry in beside.record if entry[1] == "conducting"]
    assert moved[1] - moved[0] > 16_000


MISHAPS = {
    "weld": ("weld", 1),
    "switch short": ("switch_short", 1),
    "bleed open": ("bleed_open", 1),
    "bleed short": ("bleed_short", 1),
    "more sun": ("source", {"irradiance_w_m2": 1300}),
    "less sun": ("source", {"irradiance_w_m2": 300}),
    "another diode": ("source", {"n_ns_vt_v": 2.2}),
    "voltage stuck": ("voltage_stuck", 4095),
    "current stuck": ("current_stuck", 0),
    "capacitor stuck": ("capacitor_stuck", 24),
    "power off": ("power_off", 1),
}


@pytest.mark.parametrize(("what", "value"), MISHAPS.values(), ids=MISHAPS.keys())
def test_a_mishap_has_the_same_moment_and_effect_in_both(what: str, value: Any) -> None:
    walk = Walk(Scenario.default())
    walk.charge(12_000)
    if what == "power_off":  # half a microsecond behind an edge; none comes after it
        walk.steps = [step for step in walk.steps if step[1] < 1000 * (CLOSE_US + 7001)]
        walk.last_us = CLOSE_US + 20_000
    walk.mishap(7001, what, value)
    walk.look(CLOSE_US + 2, CLOSE_US + 12_000, 7)
    walk.look(CLOSE_US + 12_100, CLOSE_US + 400_000, 1009)
    beside, _ = alike(walk)
    assert (CLOSE_US + 7001, f"event:{what}", 1) in beside.record
