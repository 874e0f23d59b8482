"""One number of a benchmark, and whether its goal holds."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True, slots=True)
class Row:
    """`goal` None: only shown. `at_least`: whether the goal is a least or a most."""

    name: str
    value: float
    unit: str
    goal: float | None
    at_least: bool = True

    @property
    def holds(self) -> bool:
        if self.goal is None:
            return True
        return self.value >= self.goal if self.at_least else self.value <= self.goal

    def as_json(self) -> dict[str, Any]:
        keys = ("name", "value", "unit", "goal", "holds")
        return {key: getattr(self, key) for key in keys}

    def as_text(self, width: int) -> str:
        """One line of a table, the name in `width` characters."""
        goal = "" if self.goal is None else f"{'>=' if self.at_least else '<='} {self.goal:g}"
        verdict = "" if self.goal is None else ("holds" if self.holds else "MISSED")
        return f"{self.name:<{width}} {self.value:>10.4g} {self.unit:<7} {goal:<10} {verdict}"
