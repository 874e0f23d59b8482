"""All checks of a device, in an order in which none spoils what another looks at."""

from __future__ import annotations

from collections.abc import Callable

from conformance import (
    device_arming,
    device_bodies,
    device_counts,
    device_frames,
    device_guards,
    device_held,
    device_pairs,
    device_prompt,
    device_sessions,
    device_sweep,
)
from conformance.bench import Bench, Stop
from conformance.checks import Check
from conformance.report import FAILED, NOT_TRIED, PASSED, Broken, Result, Verdict
from conformance.wire import Port

CHECKS: tuple[Check, ...] = (
    *device_frames.CHECKS,
    *device_bodies.CHECKS,
    *device_sessions.CHECKS,
    *device_counts.CHECKS,
    *device_arming.CHECKS,
    *device_guards.CHECKS,
    *device_pairs.FIRST_CHECKS,
    *device_prompt.CHECKS,
    # From here to the acknowledgement one sweep is held.
    *device_sweep.CHECKS,
    *device_held.CHECKS,
    *device_guards.HELD_CHECKS,
    *device_pairs.CHECKS,
    *device_prompt.HELD_CHECKS,
    *device_held.LAST_CHECKS,
    *device_pairs.LAST_CHECKS,
    *device_sweep.LAST_CHECKS,
    *device_prompt.LAST_CHECKS,
    *device_counts.LAST_CHECKS,
)


def check_device(
    port: Port,
    *,
    allow_sweep: bool = False,
    tell: Callable[[Result], object] = lambda result: None,
) -> list[Result]:
    """Make all checks of the device on this port; `tell` hears of each as it is done.

    Raises Stop where no device can be tested there. Whatever happens, the last that the device
    hears is an abort.
    """
    bench = Bench(port, allow_sweep=allow_sweep)
    results: list[Result] = []
    lost = ""
    try:
        bench.connect()
        for check in CHECKS:
            if lost:
                result = _result(check, NOT_TRIED, lost)
            else:
                result = _made(bench, check)
                lost = _after(bench)
                if lost:
                    result = _result(check, FAILED, f"{result.found}; {lost}")
            results.append(result)
            tell(result)
    finally:
        _leave(bench)
    return results


def _made(bench: Bench, check: Check) -> Result:
    try:
        bench.fresh()
        return _result(check, PASSED, check.run(bench))
    except Verdict as verdict:
        return _result(check, verdict.outcome, verdict.found)
    except (ValueError, LookupError) as error:
        # What the device said made no sense to the check.
        return _result(check, FAILED, f"{type(error).__name__}: {error}")


def _after(bench: Bench) -> str:
    """ "" where the device still answers."""
    try:
        bench.settle()
    except Broken as broken:
        return f"the device no longer answers: {broken.found}"
    return ""


def _result(check: Check, outcome: str, found: str) -> Result:
    return Result(check.name, check.clauses, outcome, check.expected, found)


def _leave(bench: Bench) -> None:
    try:
        bench.leave()
    except (Broken, OSError):
        # It answers no more; an abort may reach it all the same.
        bench.port.write(bench.abort_frame())


__all__ = ["CHECKS", "Stop", "check_device"]
