"""Targets that begin with "emulator": start an emulated tracer and give a port to it.

emulator                        the default scenario, in MicroPython where it is installed
emulator:FILE.toml              a scenario of one's own
emulator:RUNG[:FILE.toml]       RUNG is micropython or in-process
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from pathlib import Path

from kneewise.emulator.chip import CHIP_DEVICE_ID, ChipTracer
from kneewise.emulator.converters import Scaling
from kneewise.emulator.firmware import device_folder
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
    )


def start(scenario: Scenario, rung: str = "") -> Emulated:
    """An emulated tracer on a scenario; without a rung, MicroPython where it is installed."""
    profile = profile_for(scenario)
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
    """The ready profile for the scenario's converters, with its wide codes, capacitor and bleed."""
    ready = _ready_profile(scenario.board.converter)
    capacitor = ready.capacitor.model_copy(
        update={
            "capacitance_f": scenario.bank.capacitance_f,
            "bleed_ohm": scenario.bank.bleed_ohm,
            "permanent_bleeder_ohm": scenario.bank.permanent_bleeder_ohm,
        }
    )
    converter = ready.converter
    if converter.kind == "internal":
        wide = {"wide_code_lsb": scenario.board.wide_code_lsb}
        converter = converter.model_copy(update=wide)
    return ready.model_copy(update={"capacitor": capacitor, "converter": converter})


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
