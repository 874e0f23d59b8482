"""How often each thing was reached, as tables, and what was not reached at all."""

from __future__ import annotations

from collections import Counter
from textwrap import wrap
from typing import Any

from kneewire.catalogue import END_REASONS, REFUSALS, STATES

from .generator import NAMES
from .world import service_module

LEAST_SHARE = 0.1
"""Of the mutated messages, that each state receives."""
LEAST_BODIES = 0.89
"""Of the mutated messages, that are mutated before CRC and COBS: nine tenths, drawn by chance."""
TOKENS = ("valid", "used", "expired", "never granted")
# All that this firmware refuses with: "busy charging" is not among them, it answers afterwards.
CODES = sorted(
    {1, 2} | {code for name, code in vars(service_module).items() if name.startswith("R_")}
)


class Tally:
    """The counts of one run, as it goes on."""

    def __init__(self, rig: Any, generator: Any) -> None:
        self.rig = rig
        self.mutated: Counter[str] = generator.mutations
        self.received: Counter[str] = Counter()
        """Mutated messages by the state in which they arrived."""
        self.noise: Counter[str] = Counter()
        """Random bytes by the state in which they arrived."""
        self.reached: Counter[tuple[str, str]] = Counter()
        """Calls by handler and state."""
        self.handlers = sorted({*service_module.HANDLERS, "abort"})

    def note_handler(self, name: str) -> None:
        self.rig.oracle.carried += 1
        self.reached[name, self.rig.state()] += 1

    def missing(self) -> list[str]:
        """What was not reached, or too seldom."""
        oracle = self.rig.oracle
        out = [f"handler {name}" for name in self.handlers if not self._reached(name)]
        refused = Counter(code for _, code in oracle.refusals)
        out += [f"refusal {REFUSALS[code]}" for code in CODES if not refused[code]]
        out += [f"fire with a token {kind}" for kind in TOKENS if not oracle.fires[kind]]
        total = self.received.total()
        if total:
            out += [
                f"state {name}"
                for name in STATES.values()
                if self.received[name] < LEAST_SHARE * total
            ]
        if self.mutated["body"] < LEAST_BODIES * self.mutated.total():
            out.append("mutations before coding")
        if self.noise:
            # While charging, nothing but what a charge was granted to could close the contact.
            out += [f"noise while {name}" for name in _RESTING if not self.noise[name]]
        return out

    def _reached(self, name: str) -> int:
        return sum(count for (handler, _), count in self.reached.items() if handler == name)

    def _refusals(self) -> list[tuple[str, dict[int, int]]]:
        """By message; what a host does not send is one row."""
        rows = {name: dict.fromkeys(CODES, 0) for name in [*NAMES, "no request"]}
        for (name, code), count in self.rig.oracle.refusals.items():
            rows[name if name in rows else "no request"][code] += count
        return list(rows.items())

    def table(self) -> str:
        rig, oracle = self.rig, self.rig.oracle
        names = list(STATES.values())
        parts = [
            f"{self.received.total()} mutated messages, {self.mutated['body']} of them before"
            f" CRC and COBS; {self.noise.total()} random bytes; {rig.board.interruptions} times"
            f" Ctrl-C, {rig.prompts} times the prompt; {oracle.closings} charges, each granted",
            _rows("by state", names, [("messages", self.received), ("noise", self.noise)]),
            _rows(
                "handler reached",
                [name for name in names if name != "charging"],
                [
                    (name, {state: self.reached[name, state] for state in names})
                    for name in self.handlers
                ],
            ),
            _rows("refused: code", CODES, self._refusals()),
            "codes: " + ", ".join(f"{code} {REFUSALS[code]}" for code in CODES),
            "fires by token: " + ", ".join(f"{kind} {oracle.fires[kind]}" for kind in TOKENS),
            "charges ended: "
            + ", ".join(f"{END_REASONS[r]} {n}" for r, n in oracle.end_reasons.most_common()),
        ]
        return "\n\n".join(part if "\n" in part else "\n".join(wrap(part, 98)) for part in parts)


_RESTING = [name for name in STATES.values() if name != "charging"]


def _rows(title: str, heads: list[Any], rows: list[tuple[str, Any]]) -> str:
    """A table of counts, each row with its sum."""
    table = [[*map(str, heads), "all"]]
    for _, counts in rows:
        found = [counts[head] for head in heads]
        table.append([*map(str, found), str(sum(found))])
    names = [title, *(name for name, _ in rows)]
    first = max(map(len, names))
    width = 2 + max(len(cell) for line in table for cell in line)
    return "\n".join(
        f"{name:{first}}" + "".join(f"{cell:>{width}}" for cell in line)
        for name, line in zip(names, table, strict=True)
    )
