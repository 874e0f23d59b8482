"""Prints what device/README.md says of the emulated RP2040: `python tests/chip/figures.py`.

It needs what the tests of this folder need (see chip.py). Times are emulated ones.
"""

import ast
from typing import Any

from chip import missing
from on_chip import capacitor, chip_for, tracer_on

from kneewise.emulator.scenario import Scenario
from kneewise.instrument.trace import Trace

LASTING_MS = (12, 150)


def sweep_of(ms: float) -> Scenario:
    """Clear noon with a capacitor that takes so long to fill: t = 1.6 C Voc / Isc."""
    truth = Scenario.default().build_source().truth()
    return capacitor(1e-3 * ms * truth["isc"] / (1.6 * truth["voc"]))


def watched(
    scenario: Scenario, *, knots: int = 96, uptime_us: int = 0
) -> tuple[Trace, dict[str, Any]]:
    """A sweep, and the figures that board_watch.py has kept of it."""
    with chip_for(scenario, board="board_watch.py", uptime_us=uptime_us) as made:
        with tracer_on(made) as tracer:
            trace = tracer.sweep(knots=knots)
        report = made.chip.run("import emulated_board\nprint(emulated_board.report())")
    return trace, ast.literal_eval(report)


def main() -> None:
    lacking = missing()
    if lacking:
        raise SystemExit(lacking)
    for ms in LASTING_MS:
        trace, found = watched(sweep_of(ms))
        print(
            f"sweep of {ms} ms: ended {trace.end_reason}, {trace.integrity.pairs} pairs, "
            f"processor busy {100 * found['busy']:.0f} %, "
            f"at most {found['gap_us'] / 1000:.1f} ms between two visits of the reader, "
            f"at most {found['behind']} of 4096 pairs unread"
        )
    print(f"free heap after start {found['free_after_start']}, armed {found['free_armed']} bytes")
    for knots in (32, 64, 96, 512):
        _, found = watched(sweep_of(12), knots=knots)
        placed_ms, ready_ms = found["placed_us"] / 1000, found["ready_us"] / 1000
        print(
            f"placing {knots} knots: {placed_ms:.0f} ms, first block ready {ready_ms:.1f} ms after "
            f"the end of capture, heap in use at most {found['used']} bytes"
        )


if __name__ == "__main__":
    main()
