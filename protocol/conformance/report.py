"""What a check found, and the table of clauses made from it."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass

from conformance.clauses import CHECKED, OTHER

PASSED = "passed"
FAILED = "FAILED"
UNSEEN = "not seen from outside"
NOT_TRIED = "not tried"


class Verdict(Exception):
    """Ends a check; `outcome` says how, the argument what was found."""

    outcome = FAILED

    def __init__(self, found: str) -> None:
        self.found = found
        super().__init__(found)


class Broken(Verdict):
    """The clause does not hold."""


class Unseen(Verdict):
    """Here the clause does not show."""

    outcome = UNSEEN


class NotTried(Verdict):
    """What the check needs is not there, or not allowed."""

    outcome = NOT_TRIED


@dataclass(frozen=True, slots=True)
class Result:
    """One check, done. `found` is a reason where it did not fail."""

    check: str
    clauses: tuple[str, ...]
    outcome: str
    expected: str
    found: str

    def json(self) -> str:
        """One line."""
        return json.dumps(asdict(self))


@dataclass(frozen=True, slots=True)
class Line:
    """One clause of the table."""

    clause: str
    outcome: str
    remark: str
    failures: tuple[Result, ...] = ()


def lines(sides: Mapping[str, str], results: Sequence[Result]) -> Iterator[Line]:
    """A line for each clause that binds this side, in the order of SPEC.md."""
    for clause, why in sides.items():
        if why == OTHER:
            continue
        if why != CHECKED:
            yield Line(clause, UNSEEN, why)
            continue
        found = [result for result in results if clause in result.clauses]
        for outcome in (FAILED, PASSED, NOT_TRIED, UNSEEN):
            those = tuple(result for result in found if result.outcome == outcome)
            if those:
                failures = those if outcome == FAILED else ()
                told = outcome in (FAILED, PASSED)
                remarks = [result.check if told else result.found for result in those]
                yield Line(clause, outcome, "; ".join(dict.fromkeys(remarks)), failures)
                break
        else:
            yield Line(clause, NOT_TRIED, "no check came to it")


def table(sides: Mapping[str, str], results: Sequence[Result]) -> str:
    """For people: a line a clause, failures spelt out, and a count."""
    rows = list(lines(sides, results))
    out = []
    for line in rows:
        out.append(f"{line.clause:<4} {line.outcome:<22} {line.remark}")
        for result in line.failures:
            out.append(f"       {result.check}: expected {result.expected}")
            out.append(f"       found {result.found}")
    counts = dict.fromkeys((PASSED, FAILED, UNSEEN, NOT_TRIED), 0)
    for line in rows:
        counts[line.outcome] += 1
    out.append("")
    out.append(", ".join(f"{count} {outcome}" for outcome, count in counts.items()))
    return "\n".join(out)


def failed(results: Sequence[Result]) -> set[str]:
    """The clauses that did not hold."""
    wrong = [result.clauses for result in results if result.outcome == FAILED]
    return {clause for clauses in wrong for clause in clauses}
