"""The house in order: style, types, borders, documents."""

import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

from kneewire.spec import with_tables

ROOT = Path(__file__).parents[1]


def run(*words):
    return subprocess.run(words, cwd=ROOT, capture_output=True, text=True, check=False)


@pytest.mark.parametrize(
    "words",
    [
        ["-m", "ruff", "check", "."],
        ["-m", "ruff", "format", "--check", "."],
        ["-m", "mypy"],
        ["-c", "from importlinter.cli import lint_imports_command as c; c()"],
    ],
    ids=["ruff", "format", "mypy", "borders"],
)
def test_tools(words):
    done = run(sys.executable, *words)
    assert done.returncode == 0, done.stdout + done.stderr


def test_the_tables_of_the_specification_are_those_of_the_code():
    text = (ROOT / "protocol" / "SPEC.md").read_text(encoding="utf-8")
    assert text == with_tables(text), "run: python -m kneewire.spec protocol/SPEC.md"


def test_states_and_their_picture_are_those_of_the_firmware():
    sys.path.insert(0, str(ROOT / "tests" / "device"))
    import readme

    text = (ROOT / "device" / "README.md").read_text(encoding="utf-8")
    assert text == readme.page(text), "run: python tests/device/readme.py"
    drawn = (ROOT / "device" / "states.svg").read_text(encoding="utf-8")
    assert drawn == readme.picture(), "run: python tests/device/readme.py"


def test_ci_runs_the_readme_s_test_command():
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    command = re.search(r"<!-- test command -->\n```\n(.+)\n```", readme).group(1)
    assert command.endswith("pytest")
    script = (ROOT / ".ci" / "run").read_text(encoding="utf-8")
    found = re.search(r"^command=.+$", script, re.MULTILINE).group(0)
    assert run("sh", "-c", f'{found}; echo "$command"').stdout == command + "\n"
    assert command in (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")


def test_every_dependency_has_its_reason():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    named = [*project["dependencies"], *project["optional-dependencies"]["test"]]
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    for requirement in named:
        name = re.split(r"[=<>;\[ ]", requirement)[0]
        assert name in text, name


@pytest.mark.parametrize("page", ["README.md", "DEVELOPERS.md", "device/README.md"])
def test_links_lead_somewhere(page):
    text = (ROOT / page).read_text(encoding="utf-8")
    for target in re.findall(r"\]\(([^)#:]+)\)", text):
        assert ((ROOT / page).parent / target).exists(), target


def test_file_lengths_fit_a_reading():
    """About 400 lines at most; past that a file does more than one job."""
    for folder in ("host", "device", "protocol", "tests"):
        for path in (ROOT / folder).rglob("*.py"):
            if "node_modules" not in path.parts:
                assert len(path.read_text(encoding="utf-8").splitlines()) <= 450, path
