"""What a step of a proof test found: values with their limits, and what follows from them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from math import isfinite
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from kneewise.workshop.bench import Bench

PASSED = "passed"
FAILED = "failed"
NOT_MEASURED = "not measured"
NOT_DONE = "not done"
NOT_APPLICABLE = "not applicable"
NOT_HERE = "not exercised here"  # of a guard
DECIMALS = {"V": 3, "A": 4, "ms": 2, "s": 2, "uF": 1, "codes": 2, "J": 2}
"""By unit, so that reports hold what was measured and no noise of floating point."""


class NotForThisBuild(Exception):
    """Raised by a step that means nothing on this board; says why."""


class StoppedError(Exception):
    """The operator does not go on; says why."""


@dataclass(frozen=True, slots=True)
class Value:
    """One thing that was measured or seen. Numbers have limits, words an expectation; None and ""
    where it is there to be read only.
    """

    name: str
    value: float | str
    unit: str = ""
    low: float | None = None
    high: float | None = None
    expected: str = ""
    hazards: tuple[int, ...] = ()
    """That it speaks of; () for all of its step."""

    @property
    def holds(self) -> bool:
        """Within its limits, or as expected."""
        if isinstance(self.value, str):
            return not self.expected or self.value == self.expected
        above = self.low is None or self.value >= self.low
        below = self.high is None or self.value <= self.high
        return above and below

    @property
    def met(self) -> bool:
        """True for words that are as expected: nobody wants to read them twice."""
        return self.value == self.expected

    def limits(self) -> str:
        """In words, "" for none."""
        if self.expected:
            return self.expected
        unit = f" {self.unit}" if self.unit else ""
        if self.low is not None and self.low == self.high:
            return f"exactly {self.low:g}{unit}"
        if self.low is not None and self.high is not None:
            return f"{self.low:g} to {self.high:g}{unit}"
        if self.low is not None:
            return f"at least {self.low:g}{unit}"
        return "" if self.high is None else f"at most {self.high:g}{unit}"

    def said(self) -> str:
        """The value in words."""
        if isinstance(self.value, str):
            return self.value
        return f"{self.value:.10g} {self.unit}".rstrip()

    def content(self) -> dict[str, Any]:
        """For the report."""
        return {
            "name": self.name,
            "value": self.value,
            "unit": self.unit,
            "low": self.low,
            "high": self.high,
            "expected": self.expected,
            "hazards": list(self.hazards),
            "holds": self.holds,
        }


@dataclass(frozen=True, slots=True)
class Step:
    """A step before it is done. `does` says what the tool does; `run` notes what it finds."""

    id: str
    title: str
    hazards: tuple[int, ...]
    does: str
    run: Callable[[Bench, Findings], None]


@dataclass(slots=True)
class Findings:
    """A step as it goes."""

    step: Step
    asked: list[str] = field(default_factory=list)
    values: list[Value] = field(default_factory=list)
    result: str = NOT_DONE
    reason: str = ""

    def number(
        self,
        name: str,
        value: float,
        unit: str = "",
        *,
        low: float | None = None,
        high: float | None = None,
        of: tuple[int, ...] = (),
    ) -> None:
        """Note a number, rounded to what is worth reading; NaN was not measured.

        `of`: hazards that it speaks of; () for all of the step.
        """
        low, high = (None if limit is None else _rounded(limit, unit) for limit in (low, high))
        noted = Value(name, _rounded(value, unit), unit, low, high, hazards=of)
        if not isfinite(value):
            noted = Value(name, NOT_MEASURED, expected=noted.limits(), hazards=of)
        self.values.append(noted)

    def word(self, name: str, value: str, expected: str = "", of: tuple[int, ...] = ()) -> None:
        """Note what was seen; `of` as in `number`."""
        self.values.append(Value(name, value, expected=expected, hazards=of))

    def speaks_against(self, hazard: int) -> bool:
        """Whether what failed here was about this hazard, or about the step as a whole."""
        wrong = [value for value in self.values if not value.holds]
        of_all = self.result == FAILED and not wrong
        return of_all or any(hazard in value.hazards or not value.hazards for value in wrong)

    def conclude(self) -> None:
        """Passed where all holds."""
        wrong = [value for value in self.values if not value.holds]
        self.result = FAILED if wrong else PASSED
        self.reason = "; ".join(
            f"{value.name}: {value.said()}, expected {value.limits()}" for value in wrong
        )

    def content(self) -> dict[str, Any]:
        """For the report."""
        return {
            "id": self.step.id,
            "title": self.step.title,
            "hazards": list(self.step.hazards),
            "asked": self.asked,
            "does": self.step.does,
            "values": [value.content() for value in self.values],
            "result": self.result,
            "reason": self.reason,
        }


def _rounded(value: float, unit: str) -> float:
    return round(float(value), DECIMALS.get(unit, 6)) + 0.0  # -0.0 is 0.0
