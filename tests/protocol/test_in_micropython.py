"""The board's side of the wire: the same source in a MicroPython process gives the same bytes.

Without these, a host and a device that each pass their own tests may not understand each other.
"""

from __future__ import annotations

import importlib.util
import json
import subprocess
import sys
from pathlib import Path

import pytest
import wire_checks
import wire_golden

HERE = Path(__file__).resolve().parent
ROOT = HERE.parents[1]
SEEDS = 1000


@pytest.mark.skipif(
    importlib.util.find_spec("micropython_unix") is None,
    reason="no MicroPython for this platform: its wheel is for Linux on x86_64",
)
def test_micropython_agrees_on_every_vector_and_seed() -> None:
    run = subprocess.run(
        [
            *(
                sys.executable,
                "-m",
                "micropython_unix",
                "-X",
                "heapsize=300k",
            ),  # the vectors are read whole
            *(str(HERE / "wire_onboard.py"), str(ROOT / "protocol"), str(HERE)),
            *(str(wire_golden.VECTORS), str(SEEDS)),
        ],
        capture_output=True,
        text=True,
        check=False,
        timeout=60,
    )
    assert run.returncode == 0, run.stdout[-2000:] + run.stderr
    *verdicts, last = [json.loads(line) for line in run.stdout.splitlines()]
    assert [row for row in verdicts if row["wrong"]] == []

    expected = [
        name
        for file in sorted(wire_checks.CHECKS)
        for name, _ in wire_checks.CHECKS[file](json.loads(wire_golden.written(file)))
    ]
    assert [row["vector"] for row in verdicts] == expected

    ours = wire_checks.seed_crcs(SEEDS)
    differing = [seed + 1 for seed in range(SEEDS) if last["seeds"][seed] != ours[seed]]
    assert differing[:1] == [], f"first seed with another result: {differing[0]}"
    assert len(last["seeds"]) == SEEDS
