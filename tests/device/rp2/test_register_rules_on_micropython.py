"""If these fail, the firmware keeps the RP2040's rules on CPython alone: MicroPython's own import,
buffers and arithmetic have it break one. The same checks, and the same broken firmware, as in
test_register_rules.py, in a MicroPython process.
"""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest
from from_text import Change, sources
from rules_more import GROUPS
from test_register_rules import UNINTENDED

from kneewise.emulator import process

pytestmark = pytest.mark.skipif(
    not process.available(), reason="no MicroPython is packaged for this platform"
)
HERE = Path(__file__).parent


# Where the ring's buffer comes to lie is up to MicroPython's own heap here.
HEAP_ITS_OWN = {"dma-aligned"}


def lay_out(folder: Path, changes: tuple[Change, ...] = ()) -> Path:
    (folder / "tracer").mkdir(parents=True)
    for name, text in {"__init__": "", **sources(changes)}.items():
        (folder / f"tracer/{name}.py").write_text(text, encoding="utf-8")
    return folder


def on_micropython(folder: Path, jobs: list[tuple[Path, tuple[str, ...]]]) -> list[str]:
    """What came of each job: firmware in a folder, and checks until one fails."""
    told = folder / "jobs"
    told.write_text("\n".join(f"{made} {' '.join(checks)}" for made, checks in jobs), "utf-8")
    program = f"import sys\nsys.path[:] = [{str(HERE)!r}]\nimport on_micropython as it\n"
    start = [sys.executable, "-c", "from micropython_unix import main; main()"]
    words = ["-X", "heapsize=32m", "-c", f"{program}it.main({str(told)!r})"]
    done = subprocess.run(
        [*start, *words], capture_output=True, text=True, check=False, timeout=240
    )
    assert done.returncode == 0, (done.stdout + done.stderr)[-2000:]
    lines = done.stdout.splitlines()
    assert len(lines) == len(jobs), done.stdout
    return lines


@pytest.mark.parametrize("group", GROUPS)
def test_firmware_keeps_the_rules(group: str, tmp_path: Path) -> None:
    made = lay_out(tmp_path / "firmware")
    checks = sorted({check for rule in GROUPS[group].values() for check in rule.checks})
    came = on_micropython(tmp_path, [(made, (check,)) for check in checks])
    assert dict(zip(checks, came, strict=True)) == dict.fromkeys(checks, "passed")


@pytest.mark.parametrize("group", GROUPS)
def test_firmware_that_breaks_a_rule_is_caught(group: str, tmp_path: Path) -> None:
    names: list[tuple[str, str]] = []
    jobs: list[tuple[Path, tuple[str, ...]]] = []
    for key, rule in GROUPS[group].items():
        broken = {} if key in HEAP_ITS_OWN else rule.broken
        for name, changes in broken.items():
            names.append((key, name))
            jobs.append((lay_out(tmp_path / f"firmware-{len(jobs)}", changes), rule.checks))
    came = dict(zip(names, on_micropython(tmp_path, jobs), strict=True))
    assert [name for name, line in came.items() if not line.startswith("failed")] == []
    unintended = tuple(kind.__name__ for kind in UNINTENDED)
    assert [line for line in came.values() if line.split()[2] in unintended] == []
