"""A scenario: the source, the load and the board's errors that an emulated tracer meets.

Comes in: a TOML file. Goes out: `Scenario`, checked and frozen, and the models built from
it. Whatever is wrong with a file becomes one `ScenarioError` that names the key and what it
may be. How the plant behaves does not belong here.
"""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Mapping
from importlib import resources
from pathlib import Path
from typing import Any, Literal, Self, get_args, get_origin

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator
from pydantic.fields import FieldInfo

from kneewise.emulator.circuit import Circuit
from kneewise.emulator.source import Source
from kneewise.errors import ScenarioError

# Boltzmann constant (J/K) and elementary charge (C), exact by the SI of 2019.
BOLTZMANN = 1.380649e-23
CHARGE = 1.602176634e-19
ZERO_CELSIUS_K = 273.15

_EXAMPLE = "clear_noon.toml"
_START_FROM = "`kneewise emulate --example` prints a whole scenario to start from"


class _Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


class SourceSection(_Section):
    """A module or string as one diode; photocurrent at 1000 W/m2."""

    photocurrent_a: float = Field(ge=0.0, le=500.0)
    saturation_current_a: float = Field(gt=0.0, le=0.01)
    n_ns_vt_v: float | None = Field(default=None, gt=0.0, le=500.0)
    cells_in_series: int | None = Field(default=None, ge=1, le=5000)
    ideality: float | None = Field(default=None, gt=0.0, le=5.0)
    cell_temperature_c: float | None = Field(default=None, ge=-60.0, le=150.0)
    series_resistance_ohm: float = Field(ge=0.0, le=100.0)
    shunt_resistance_ohm: float = Field(ge=0.1, le=1e9)
    irradiance_w_m2: float = Field(default=1000.0, ge=0.0, le=2000.0)

    @model_validator(mode="after")
    def _one_way(self) -> Self:
        parts = (self.cells_in_series, self.ideality, self.cell_temperature_c)
        given = sum(part is not None for part in parts)
        if given != (0 if self.n_ns_vt_v is not None else 3):
            raise ValueError(
                "either n_ns_vt_v, or cells_in_series with ideality and cell_temperature_c"
            )
        return self

    @property
    def thermal_v(self) -> float:
        """n Ns Vt, with Vt = k T / q (V)."""
        if self.n_ns_vt_v is not None:
            return self.n_ns_vt_v
        # `_one_way` leaves all three present here.
        assert self.cells_in_series is not None
        assert self.ideality is not None
        assert self.cell_temperature_c is not None
        kelvin = self.cell_temperature_c + ZERO_CELSIUS_K
        return self.cells_in_series * self.ideality * BOLTZMANN * kelvin / CHARGE


class LoadSection(_Section):
    """From the source's terminals to the capacitor bank and what empties it."""

    capacitance_f: float = Field(ge=1e-6, le=100.0)
    capacitance_of_nominal: float = Field(default=1.0, ge=0.05, le=5.0)
    capacitor_esr_ohm: float = Field(ge=0.0, le=10.0)
    bleed_ohm: float = Field(ge=0.1, le=1e6)
    bleed_of_nominal: float = Field(default=1.0, ge=1e-4, le=100.0)
    permanent_bleeder_ohm: float = Field(ge=10.0, le=1e9)
    lead_resistance_ohm: float = Field(ge=0.0, le=10.0)
    contact_resistance_ohm: float = Field(ge=0.0, le=10.0)
    capacitor_start_v: float = Field(default=0.0, ge=0.0, le=1500.0)


class BoardSection(_Section):
    """How the board's own readings are off, and which faults it has."""

    contact: Literal["relay+switch", "relay"] = "relay+switch"
    bounce_ms: float = Field(default=0.0, ge=0.0, le=20.0)
    converter: Literal["internal", "spi16"] = "internal"
    wide_code_lsb: float = Field(default=9.0, ge=1.0, le=32.0)
    adc_noise_codes: float = Field(default=1.2, ge=0.0, le=200.0)
    voltage_gain_error: float = Field(default=0.0, ge=-0.5, le=0.5)
    current_gain_error: float = Field(default=0.0, ge=-0.5, le=0.5)
    voltage_offset_codes: float = Field(default=0.0, ge=-500.0, le=500.0)
    current_offset_codes: float = Field(default=0.0, ge=-500.0, le=500.0)
    leads_reversed: bool = False
    stop_loop_open: bool = False
    contact_welded: bool = False
    relay_welded: bool = False
    switch_shorted: bool = False
    bleed_open: bool = False
    voltage_stuck_code: int | None = Field(default=None, ge=0, le=4095)
    current_stuck_code: int | None = Field(default=None, ge=0, le=4095)
    capacitor_stuck_code: int | None = Field(default=None, ge=0, le=4095)


class Scenario(_Section):
    """Everything the emulated device meets; see `scenarios/clear_noon.toml` for each key."""

    title: str = Field(min_length=1, max_length=200)
    place: str = Field(min_length=1, max_length=200)
    seed: int = Field(ge=0, le=2**32 - 1)
    source: SourceSection
    bank: LoadSection = Field(alias="load")
    board: BoardSection = BoardSection()

    @classmethod
    def load(cls, path: str | Path) -> Scenario:
        """Read a scenario file. Raises ScenarioError."""
        try:
            text = Path(path).read_text(encoding="utf-8")
        except (OSError, UnicodeDecodeError) as error:
            reason = error.strerror if isinstance(error, OSError) else "not UTF-8 text"
            raise ScenarioError(
                f"reading scenario {path}",
                found=f"no readable file ({reason})",
                expected="a scenario in TOML",
                next_step=f"check the path; {_START_FROM}",
            ) from error
        return cls.load_text(text, str(path))

    @classmethod
    def load_text(cls, text: str, where: str) -> Scenario:
        """From TOML text; `where` names it in messages. Raises ScenarioError."""
        try:
            content = tomllib.loads(text)
        except tomllib.TOMLDecodeError as error:
            raise ScenarioError(
                f"reading scenario {where}",
                found=f"no valid TOML: {error}",
                expected="a scenario in TOML",
                next_step=f"correct that line; {_START_FROM}",
            ) from error
        return cls._checked(content, f"reading scenario {where}")

    @classmethod
    def default(cls) -> Scenario:
        """Clear noon: a 60-cell module at 1000 W/m2 on a board without faults."""
        return cls.load_text(example_text(), _EXAMPLE)

    @classmethod
    def _checked(cls, content: Mapping[str, Any], what: str) -> Scenario:
        try:
            return cls.model_validate(content)
        except ValidationError as error:
            raise _explained(error, what) from error

    def content(self) -> dict[str, Any]:
        """Everything in it, with the keys of the file: what an archive keeps of it."""
        return self.model_dump(by_alias=True, exclude_none=True)

    def varied(self, **changes: Any) -> Scenario:
        """A copy with other values: `scenario.varied(seed=2, source={"irradiance_w_m2": 200})`.

        A section is merged key by key; None removes a key. Raises ScenarioError.
        """
        content = self.content()
        for key, value in changes.items():
            if isinstance(value, Mapping) and isinstance(content.get(key), dict):
                content[key] |= value
            else:
                content[key] = value
        return self._checked(content, f"varying scenario {self.title}")

    def build_source(self) -> Source:
        """The source at the scenario's irradiance; the photocurrent is proportional to it."""
        s = self.source
        return Source(
            photocurrent_a=s.photocurrent_a * s.irradiance_w_m2 / 1000.0,
            saturation_current_a=s.saturation_current_a,
            n_ns_vt_v=s.thermal_v,
            series_resistance_ohm=s.series_resistance_ohm,
            shunt_resistance_ohm=s.shunt_resistance_ohm,
        )

    def build_circuit(self) -> Circuit:
        """Capacitor bank, leads and contacts, as they truly are."""
        bank, board = self.bank, self.board
        return Circuit(
            capacitance_f=bank.capacitance_f * bank.capacitance_of_nominal,
            capacitor_esr_ohm=bank.capacitor_esr_ohm,
            bleed_ohm=bank.bleed_ohm * bank.bleed_of_nominal,
            permanent_bleeder_ohm=bank.permanent_bleeder_ohm,
            lead_resistance_ohm=bank.lead_resistance_ohm,
            contact_resistance_ohm=bank.contact_resistance_ohm,
            capacitor_start_v=bank.capacitor_start_v,
            bare_relay=board.contact == "relay",
            bounce_us=round(1000 * board.bounce_ms),
            bounce_seed=self.seed,
            leads_reversed=board.leads_reversed,
            contact_welded=board.contact_welded,
            relay_welded=board.relay_welded,
            switch_shorted=board.switch_shorted,
            bleed_open=board.bleed_open,
        )


def example_text() -> str:
    """The default scenario as shipped, with its comments."""
    folder = resources.files("kneewise.emulator") / "scenarios"
    return (folder / _EXAMPLE).read_text(encoding="utf-8")


# -- messages ---------------------------------------------------------------------------------

_SECTIONS: dict[str, type[_Section]] = {
    "source": SourceSection,
    "load": LoadSection,
    "board": BoardSection,
}
_KINDS = {float: "a number", int: "a whole number", bool: "true or false", str: "text"}
_LIMITS = (
    ("gt", "above {}"),
    ("ge", "at least {}"),
    ("le", "at most {}"),
    ("min_length", "of at least {} character"),
    ("max_length", "at most {} characters"),
)
_TWO_WAYS = ("n_ns_vt_v", "cells_in_series", "ideality", "cell_temperature_c")


def _fields(place: tuple[int | str, ...]) -> dict[str, FieldInfo]:
    """The keys that the file may have at this place, by their names in the file."""
    model = _SECTIONS[str(place[0])] if place else Scenario
    return {info.alias or name: info for name, info in model.model_fields.items()}


def _allowed(name: str, info: FieldInfo) -> str:
    if name in _SECTIONS:
        return f"a section [{name}]"
    if get_origin(info.annotation) is Literal:
        return " or ".join(f'"{choice}"' for choice in get_args(info.annotation))
    kind = next(text for kind, text in _KINDS.items() if info.annotation in (kind, kind | None))
    limits = [
        text.format(getattr(rule, limit))
        for limit, text in _LIMITS
        for rule in info.metadata
        if getattr(rule, limit, None) is not None
    ]
    return " ".join((kind, " and ".join(limits))).strip()


def _shown(value: object) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _explained(error: ValidationError, what: str) -> ScenarioError:
    """One message for the first thing wrong; an unknown key first, since it explains a missing."""
    problems = sorted(error.errors(), key=lambda one: one["type"] != "extra_forbidden")
    first = problems[0]
    place, more = first["loc"], len(problems) - 1
    key = ".".join(str(part) for part in place)
    siblings = _fields(place[:-1])
    name = str(place[-1])
    if first["type"] == "extra_forbidden":
        close = difflib.get_close_matches(name, siblings, n=1)
        found = f"an unknown key {key}"
        expected = close[0] if close else "one of " + ", ".join(siblings)
        next_step = f"rename it to {close[0]}" if close else f"remove {key}"
    elif first["type"] == "missing":
        found, expected = f"no {key}", _allowed(name, siblings[name])
        next_step = f"add {key}; {_START_FROM}"
    elif first["type"] == "value_error":
        given = [one for one in _TWO_WAYS if first["input"].get(one) is not None]
        found = f"{', '.join(given) if given else 'neither way'} in [{key}]"
        expected, next_step = str(first["ctx"]["error"]), "give exactly one of the two ways"
    else:
        found = f"{key} = {_shown(first['input'])}"
        expected, next_step = _allowed(name, siblings[name]), f"correct {key}"
    if more:
        found += f" (and {more} more)"
    return ScenarioError(what, found=found, expected=expected, next_step=next_step)
