"""Targets that begin with "emulator": start an emulated tracer and give a port to it.

emulator                        the default scenario, in MicroPython where it is installed
emulator:FILE.toml              a scenario of one's own
emulator:RUNG[:FILE.toml]       RUNG is micropython or in-process
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import lru_cache
from pathlib import Path

from kneewire.guards import STORED_MJ
from kneewise.emulator.chip import CHIP_DEVICE_ID, ChipTracer
from kneewise.emulator.converters import Scaling
from kneewise.emulator.firmware import device_folder
from kneewise.emulator.hands import EmulatedHands
from kneewise.emulator.inprocess import InProcessTracer
from kneewise.emulator.process import ProcessTracer, available
from kneewise.emulator.scenario import Scenario
from kneewise.errors import UsageError
from kneewise.instrument.opened import Opened
from kneewise.instrument.profile import BoardProfile
from kneewise.link.port import Port, open_port

DEVICE_ID = b"KNEEWISE"
RUNGS = ("micropython", "in-process", "chip")

Emulated = InProcessTracer | ProcessTracer | ChipTracer


def open_emulator(target: str) -> Opened:
    """Start what the target names. UsageError, ScenarioError."""
    rung, file = _parts(target)
    scenario = Scenario.load(Path(file)) if file else Scenario.default()
    tracer = start(scenario, rung)
    return Opened(
        connect=connector(tracer),
        close=tracer.close,
        rung=tracer.rung,
        scenario=scenario.content(),
        truth=scenario.build_source().truth(),
        hands=None if isinstance(tracer, ChipTracer) else EmulatedHands(tracer),
    )


def start(scenario: Scenario, rung: str = "", profile: BoardProfile | None = None) -> Emulated:
    """An emulated tracer on a scenario; without a rung, MicroPython where it is installed.

    `profile`: what the board is told it is, in place of what goes with the scenario.
    """
    profile = profile or profile_for(scenario)
    scaling = scaling_of(profile)
    if rung == "chip":
        return ChipTracer(scenario, scaling, profile.record(CHIP_DEVICE_ID))
    values = (scenario, scaling, profile.record(DEVICE_ID), DEVICE_ID)
    if not rung:
        rung = "micropython" if available() else "in-process"
    if rung == "in-process":
        return InProcessTracer(*values)
    if not available():
        raise UsageError(
            "starting the emulated tracer in MicroPython",
            found="no MicroPython for this platform",
            expected="Linux on x86-64, where its package is installed with Kneewise",
            next_step="use emulator or emulator:in-process",
        )
    return ProcessTracer(*values)


def connector(tracer: Emulated) -> Callable[[], Port]:
    """How a host gets a port to an emulated tracer, the first time and after a lost link."""
    if isinstance(tracer, InProcessTracer | ChipTracer):
        return tracer.connect
    return lambda: open_port(tracer.port_name)


PROFILES = {"internal": "reference.toml", "spi16": "spi16.toml"}


@lru_cache(maxsize=len(PROFILES))
def _ready_profile(converter: str) -> BoardProfile:
    return BoardProfile.load(device_folder() / "profiles" / PROFILES[converter])


def profile_for(scenario: Scenario) -> BoardProfile:
    """The ready profile for the scenario's converters, with its wide codes and contact, and
    capacitor and bleed as they are meant to be.
    """
    board = scenario.board
    ready = _ready_profile(board.converter)
    bounce_ms = max(math.ceil(board.bounce_ms), 1 if board.contact == "relay" else 0)
    capacitor = ready.capacitor.model_copy(
        update={
            "capacitance_f": scenario.bank.capacitance_f,
            "permanent_bleeder_ohm": scenario.bank.permanent_bleeder_ohm,
        }
    )
    # As a builder would: no more than class A stores, and a resistor for two sweeps of it.
    farad = scenario.bank.capacitance_f
    rated_v = min(ready.limits.rated_v, max(math.floor((2e-3 * STORED_MJ[0] / farad) ** 0.5), 1))
    energy_j = max(ready.bleed.energy_j, math.ceil(farad * rated_v**2))
    bleed = ready.bleed.model_copy(update={"ohm": scenario.bank.bleed_ohm, "energy_j": energy_j})
    converter = ready.converter
    if converter.kind == "internal":
        wide = {"wide_code_lsb": board.wide_code_lsb}
        converter = converter.model_copy(update=wide)
    return ready.model_copy(
        update={
            "contact": board.contact,
            "contact_breaks_dc": board.contact == "relay+switch",
            "capacitor": capacitor,
            "bleed": bleed,
            "limits": ready.limits.model_copy(update={"rated_v": rated_v}),
            "converter": converter,
            "timing": ready.timing.model_copy(update={"bounce_ms": bounce_ms}),
        }
    )


def scaling_of(profile: BoardProfile) -> Scaling:
    """The converters' scale factors that make the profile true."""
    return Scaling(
        voltage_v_per_code=profile.voltage.per_code_v,
        voltage_zero_code=profile.voltage.zero_code,
        current_a_per_code=profile.current.per_code_a,
        current_zero_code=profile.current.zero_code,
        capacitor_v_per_code=profile.capacitor.per_code_v,
        capacitor_zero_code=profile.capacitor.zero_code,
    )


def _parts(target: str) -> tuple[str, str]:
    """(rung or "", scenario file or "")."""
    _, _, rest = target.partition(":")
    first, _, file = rest.partition(":")
    if first in RUNGS:
        return first, file
    if rest and not rest.endswith(".toml"):
        raise UsageError(
            f"opening {target}",
            found=f"{rest!r}, which is neither a rung nor a .toml file",
            expected="emulator, emulator:FILE.toml, emulator:micropython or emulator:in-process",
            next_step="`kneewise emulate --example` prints a scenario to start from",
        )
    return "", rest
