"""Checks of G on a device: guards that speak, what they name, and what is kept of the contact.

Nothing closes here, and nothing is written: a proof test's date is only read.
"""

from __future__ import annotations

from conformance.bench import Bench
from conformance.checks import Check
from conformance.report import Broken, NotTried
from conformance.sweeping import whole
from kneewire import catalogue

SOURCE, HEAT = 4, 10  # guards
LOW_MV = 1
MILLIVOLT = {text: code for code, text in catalogue.UNITS.items()}["mV"]


def a_lower_limit_refuses(bench: Bench) -> str:
    if not bench.may_arm:
        raise NotTried("a contact may close")
    bench.drop_own()
    bench.wait_cool()
    frame = bench.ask("arm", bench.arm_values(limit_mv=LOW_MV))
    if frame.refusal() != "interlock":
        if bench.state() == "armed":
            bench.answer(bench.abort_frame())
            raise NotTried("the source is dark")
        raise NotTried(f"the device does not arm: {frame.refusal()}")
    refusal = frame.reply("refusal")
    if refusal["guard"] != SOURCE:
        raise NotTried(f"guard H{refusal['guard']} speaks first")
    if (refusal["limit"], refusal["unit"]) != (LOW_MV, MILLIVOLT) or refusal["measured"] <= LOW_MV:
        raise Broken(f"measured {refusal['measured']}, limit {refusal['limit']}")
    bench.arm()
    bench.answer(bench.abort_frame())
    return f"{refusal['measured']} mV refused, and taken without that limit"


def exercises_out_of_range(bench: Bench) -> str:
    most = max(catalogue.EXERCISES)
    for exercise in (most + 1, 255):
        frame = bench.ask("arm", bench.arm_values(confirmed=0, exercise=exercise))
        if frame.refusal() == "wrong state":
            raise NotTried(f"the device does not arm in state {bench.state()}")
        if frame.refusal() != "out of range":
            raise Broken(f"{frame} to exercise {exercise}")
    return f"{most + 1} and 255 are out of range"


def the_heat_is_told(bench: Bench) -> str:
    status = bench.status()
    if status["rest_ms"] and bench.may_arm and bench.state() == "safe":
        frame = bench.ask("arm", bench.arm_values())
        if frame.refusal() == "":
            bench.answer(bench.abort_frame())
            if bench.status()["rest_ms"]:
                raise Broken("armed while the bleed resistor has no room")
        elif frame.refusal() == "interlock":
            guard = frame.reply("refusal")["guard"]
            if guard != HEAT:
                raise NotTried(f"guard H{guard} speaks first")
    return f"{status['bleed_mj']} mJ, {status['rest_ms']} ms to rest"


def the_logbook_stays(bench: Bench) -> str:
    book = bench.ask("read_logbook").reply("logbook")
    again = bench.ask("read_logbook").reply("logbook")
    if book.values != again.values:
        raise Broken("read twice, and not the same")
    if book["hot_openings"] > book["operations"]:
        raise Broken(f"{book['hot_openings']} hot openings of {book['operations']} operations")
    return f"{book['operations']} operations"


def the_capacitor_is_told(bench: Bench) -> str:
    manifest = whole(bench).manifest
    if not manifest["capacitor_conversions"]:
        raise Broken("no reading of the capacitor with a sweep that has ended")
    if manifest["capacitor_full_sum"] <= manifest["capacitor_before_sum"]:
        raise Broken("a charge that has left no charge")
    if manifest["hot_opening"] not in (0, 1):
        raise Broken(f"hot_opening is {manifest['hot_opening']}")
    return "before and after, and the current at opening"


CHECKS = (
    Check("a lower limit", ("G1", "G2"), "`interlock` of guard 4 with both", a_lower_limit_refuses),
    Check("exercises out of range", ("G3",), "`out of range`", exercises_out_of_range),
    Check("the heat of the bleed", ("G4",), "no arming before its rest", the_heat_is_told),
    Check("the logbook", ("G5",), "the same, twice", the_logbook_stays),
)
HELD_CHECKS = (
    Check("the capacitor in the manifest", ("G7",), "its readings", the_capacitor_is_told),
)
