"""If this fails, SPEC.md promises something that no test looks at, or a test names no clause."""

from __future__ import annotations

import ast
import re
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
CLAUSE = re.compile(r"^\*\*([A-Z]\d+)\.\*\*", re.MULTILINE)


def clauses() -> set[str]:
    return set(CLAUSE.findall((ROOT / "protocol/SPEC.md").read_text(encoding="utf-8")))


def named_by_tests() -> dict[str, set[str]]:
    """Clause: the test files whose `clause` marks name it."""
    found: dict[str, set[str]] = {}
    for file in (ROOT / "tests").rglob("test_*.py"):
        for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Call) and ast.unparse(node.func) == "pytest.mark.clause":
                for argument in node.args:
                    found.setdefault(ast.literal_eval(argument), set()).add(file.name)
    return found


def test_every_clause_has_a_test_that_names_it() -> None:
    assert len(clauses()) > 50
    assert clauses() - set(named_by_tests()) == set()


def test_every_clause_that_a_test_names_is_there() -> None:
    assert set(named_by_tests()) - clauses() == set()
