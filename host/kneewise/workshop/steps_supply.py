"""The steps of a proof test that want a current-limited bench supply as the source."""

from __future__ import annotations

from math import log

import numpy as np

from kneewire import catalogue, guards
from kneewise.errors import LinkError
from kneewise.instrument.hands import Reading, Task
from kneewise.workshop.bench import Bench, Charged, ended, guard_of, refusal
from kneewise.workshop.evidence import Findings, NotForThisBuild, Step, StoppedError

LEAST_V, MOST_V = 10.0, 30.0
LEAST_A, MOST_A = 0.3, 2.0
AGREE = 0.03  # of the operator's meter and the tracer, besides AGREE_CODES
AGREE_CODES = 6
SETTLED_S = 1.0
WATCHED_S = 2.0
BELOW = 0.95  # of the supply's voltage: where H4 is put
LEAST_PART, MOST_PART = 0.25, 1.3  # of the supply's current limit, as a sweep sees it
BARE_PART = 0.75  # of the supply's voltage, that a bare relay charges to
HALF = 0.5  # of the supply's current: where H6 is put
TRIP_S = 2e-3  # from a trip condition to the pin
PEAK_S = 0.5e-3
KEPT_S = 1e-3  # pairs kept behind the latest end of a trip
BLEED_MARGIN_S = 0.15  # looks at the end of a bleed are 20 ms apart, its least allowance 100 ms
PULL_S = 120.0


def contact_open(bench: Bench, found: Findings) -> None:
    """H2: the open contact holds the supply off."""
    bench.supply_v = bench.read(found, Reading.SUPPLY_V, LEAST_V, _most_v(bench))
    least_a = min(max(LEAST_A, 1.5 * bench.near_zero_a), 0.75 * MOST_A)
    bench.supply_a = bench.read(found, Reading.SUPPLY_A, least_a, MOST_A)
    found.number("supply by the operator's meter", bench.supply_v, "V")
    found.number("current limit by the operator", bench.supply_a, "A")
    bench.ask(found, Task.CONNECT_SUPPLY, voltage_v=bench.supply_v, current_a=bench.supply_a)
    bench.sleep(WATCHED_S)
    _held_off(bench, found)


def supply_seen(bench: Bench, found: Findings) -> None:
    """H4: the tracer sees what the operator's meter has shown."""
    status = bench.tracer.status()
    _agrees(bench, found, "source as the tracer sees it", status.source_v)
    found.word("leads", "reversed" if status.leads_reversed else "right", "right")


def _most_v(bench: Bench) -> float:
    return min(MOST_V, float(BELOW * bench.profile["rated_mv"] / 1e3))


def _agrees(
    bench: Bench, found: Findings, name: str, volts: float, of: tuple[int, ...] = ()
) -> None:
    """With what the operator's meter showed."""
    off = AGREE * bench.supply_v + AGREE_CODES * bench.finer * bench.scales.voltage_v_per_code
    low, high = bench.supply_v - off, bench.supply_v + off
    found.number(name, volts, "V", low=low, high=high, of=of)


def _held_off(bench: Bench, found: Findings) -> None:
    """Contact open: state, current and capacitor."""
    of = (2,)
    status = bench.tracer.status()
    found.word("state", status.state, "safe", of)
    least_a = guards.ZERO_CODES * bench.finer * bench.scales.current_a_per_code
    found.number("current, contact open", status.current_a, "A", low=-least_a, high=least_a, of=of)
    start_v = bench.supply_v * bench.profile["start_permyriad"] / 1e4
    empty_v = max(start_v, AGREE_CODES * bench.scales.capacitor_v_per_code)
    found.number("capacitor, contact open", status.capacitor_v, "V", high=empty_v, of=of)


def over_voltage(bench: Bench, found: Findings) -> None:
    """H4, before closing."""
    limit_v = BELOW * bench.supply_v
    error = refusal(lambda: bench.arm("sweep", limit_v=limit_v))
    found.number("limit asked for", limit_v, "V")
    found.word("arming was refused by", guard_of(error), "H4")
    if error is not None and error.unit == "mV":
        _agrees(bench, found, "source as the refusal tells it", error.measured / 1e3)
    bench.disarm()


def reversed_leads(bench: Bench, found: Findings) -> None:
    """H5."""
    bench.ask(found, Task.SWAP_LEADS)
    bench.sleep(SETTLED_S)
    found.word("leads once swapped", _leads(bench), "reversed")
    error = refusal(lambda: bench.arm("sweep"))
    found.word("arming was refused by", guard_of(error), "H5")
    bench.session.abort()
    bench.ask(found, Task.LEADS_RIGHT)
    bench.sleep(SETTLED_S)
    found.word("leads once put right", _leads(bench), "right")
    bench.disarm()


def _leads(bench: Bench) -> str:
    return "reversed" if bench.tracer.status().leads_reversed else "right"


def relay_alone(bench: Bench, found: Findings) -> None:
    """H2: the wave runs, the relay is not energised."""
    if bench.bare:
        raise NotForThisBuild(
            "a bare relay has no switch in series: the wave would close it. B1 and B6 show that "
            "the open contact holds the source off"
        )
    charged = bench.charge("relay left open")
    if ended(found, charged, "no current"):
        _held_off(bench, found)


def whole_sweep(bench: Bench, found: Findings) -> None:
    """H1, H2, H3, H6, H10, H15, H16: a sweep, its capacitor and its bleed."""
    _, hot = bench.operations()
    charged = bench.charge("sweep", pairs=_pairs(bench, PEAK_S))
    sound = ended(found, charged, "complete")
    if charged.end_reason != "complete":
        return
    bench.peak_a = _peak_a(charged)
    low, high = LEAST_PART * bench.supply_a, MOST_PART * bench.supply_a
    found.number("current at its beginning", bench.peak_a, "A", low=low, high=high, of=(6,))
    full_v = _capacitor(bench, found, charged)
    if not sound:
        return
    _bleed(bench, found, charged, full_v)
    _, now_hot = bench.operations()
    found.number("openings under load counted", now_hot - hot, high=0, of=(16,))
    apart_ms = (charged.manifest["opened_us"] - charged.ended_us) / 1e3
    least_ms = bench.profile["relay_release_ms"] + bench.profile["dead_time_ms"]
    found.number("from the last pair to the bleed engaged", apart_ms, "ms", low=least_ms, of=(3,))
    bench.sleep(WATCHED_S)
    _held_off(bench, found)


def _pairs(bench: Bench, seconds: float) -> int:
    """Kept one by one, from conduction on."""
    wanted: int = round(seconds * 1e6 / bench.profile["pair_us"])
    return min(wanted, catalogue.MAX_RAW_PAIRS)


def _peak_a(charged: Charged) -> float:
    """Mean over PEAK_S; nan without current."""
    first = charged.current_a
    return float(first.mean()) if len(first) else float("nan")


def _capacitor(bench: Bench, found: Findings, charged: Charged) -> float:
    """H15, and the voltage that the capacitor was brought to."""
    values, profile, scales = charged.manifest.values, bench.profile, bench.scales
    conversions = values["capacitor_conversions"] or 1
    full_v = scales.capacitor(values["capacitor_full_sum"] / conversions)
    empty_v = scales.capacitor(values["capacitor_before_sum"] / conversions)
    if bench.bare:
        # It opens when a module's charge would be over, before a supply behind a resistor is done.
        low, high = BARE_PART * bench.supply_v, (1 + AGREE) * bench.supply_v
        found.number("capacitor, charged", full_v, "V", low=low, high=high, of=(15,))
    else:
        _agrees(bench, found, "capacitor, charged", full_v, (15,))
    nominal_uf = 1e6 * scales.capacitance_f
    found.number(
        "capacitance, charge over rise",
        1e6 * charged.charge_c / max(full_v - empty_v, 1e-3),
        "uF",
        low=nominal_uf * profile["capacitance_low_percent"] / 100,
        high=nominal_uf * profile["capacitance_high_percent"] / 100,
        of=(15,),
    )
    return full_v


def _bleed(bench: Bench, found: Findings, charged: Charged, full_v: float) -> None:
    """H1, H10: how fast, and how far down."""
    values, profile, scales = charged.manifest.values, bench.profile, bench.scales
    percent = profile["bleed_time_percent"]
    nominal_s = 1e-3 * profile["bleed_mohm"] * scales.capacitance_f
    tau_s = 1e-6 * values["bleed_tau_us"]
    found.number(
        "bleed time constant",
        1e3 * tau_s,
        "ms",
        low=10 * nominal_s * guards.BLEED_LOW_PERCENT,
        high=10 * nominal_s * percent,
        of=(1, 10),
    )
    if full_v > scales.safe_v:
        found.number(
            f"so below {scales.safe_v:g} V after",
            1e3 * tau_s * log(full_v / scales.safe_v),
            "ms",
            high=10 * nominal_s * log(full_v / scales.safe_v) * percent,
            of=(1,),
        )
    start_v = full_v * profile["start_permyriad"] / 1e4 * 7 / 8
    start_v = max(start_v, 2 * scales.capacitor_v_per_code)
    found.number(
        "measured empty enough to start after",
        1e-6 * (charged.status.device_us - values["opened_us"]),
        "s",
        high=nominal_s * log(full_v / start_v) * percent / 100 + BLEED_MARGIN_S,
        of=(1,),
    )
    found.number("capacitor then", charged.status.capacitor_v, "V", high=scales.safe_v, of=(1,))


def over_current(bench: Bench, found: Findings) -> None:
    """H6, H16: a trip in flight."""
    limit_a = HALF * bench.peak_a
    _, hot = bench.operations()
    tripped_s = TRIP_S + _release_s(bench)
    charged = bench.charge("sweep", pairs=_pairs(bench, tripped_s + KEPT_S), limit_a=limit_a)
    fault = charged.fault
    found.number("limit asked for", limit_a, "A")
    found.word("charge ended", charged.end_reason, "over-current", (6,))
    found.word("fault", guard_of(fault), "H6", (6,))
    if fault is None or fault.guard != 6:
        return
    found.number("current as the fault tells it", fault.measured / 1e3, "A", low=limit_a, of=(6,))
    above = np.flatnonzero(charged.current_a > limit_a)
    lasted_s = len(above) and (above[-1] - above[0] + 1) * charged.manifest["pair_ns"] * 1e-9
    high = 1e3 * tripped_s if bench.may_break else None
    found.number("current above the limit for", 1e3 * lasted_s, "ms", high=high, of=(6,))
    _, now_hot = bench.operations()
    counted = 1 if bench.may_break else 0
    found.number("openings under load counted", now_hot - hot, low=counted, high=counted, of=(16,))
    error = refusal(lambda: bench.arm("sweep"))
    found.word("arming in the fault was refused with", guard_of(error), "H6", (6,))
    bench.tracer.clear_fault()
    found.word("state once cleared", bench.connection.wait_safe().state, "safe", (6,))


def _release_s(bench: Bench) -> float:
    """Of the part that breaks the current."""
    profile = bench.profile
    if bench.bare:
        return float(profile["relay_release_ms"]) / 1e3
    return float(profile["switch_release_us"]) / 1e6


def power_lost(bench: Bench, found: Findings) -> None:
    """H21, H13: nothing but pulls, the bleed's resting contact and the permanent bleeder."""
    profile, scales = bench.profile, bench.scales
    target_v = min(scales.safe_v, 0.5 * bench.supply_v)
    largest_f = scales.capacitance_f * profile["capacitance_high_percent"] / 100
    stated_s = profile["permanent_bleeder_ohm"] * largest_f * log(bench.supply_v / target_v)
    nonce = bench.connection.device["boot_nonce"]
    bench.ask(found, Task.PULL_POWER)
    rounds = _charge_until_pulled(bench)
    found.number("charges begun until the link went", rounds, low=1)
    bench.ask(found, Task.WAIT, seconds=stated_s)
    found.number("time that the permanent bleeder alone may take", stated_s, "s")
    left_v = bench.read(found, Reading.CAPACITOR_V, -MOST_V, bench.supply_v * 1.5)
    found.number("capacitor by the operator's meter", left_v, "V", high=target_v, of=(21,))
    bench.ask(found, Task.GIVE_POWER)
    bench.connection.rejoin(PULL_S)
    hello = bench.connection.device
    found.word("started anew", "yes" if hello["boot_nonce"] != nonce else "no", "yes")
    cause = catalogue.RESET_CAUSES.get(hello["reset_cause"], "unknown")
    found.word("reset cause", cause, "power on", (13,))
    status = bench.connection.wait_safe()
    found.word("contact", "closed" if status.contact_closed else "open", "open")
    found.number("capacitor as the tracer sees it", status.capacitor_v, "V", high=target_v)


def _charge_until_pulled(bench: Bench) -> int:
    """Charge and bleed until the link is gone; how often it was begun."""
    session = bench.session
    end_s = session.port.clock() + PULL_S
    rounds = 0
    try:
        while session.port.clock() < end_s:
            bench.connection.wait_safe()
            token = bench.arm("sweep")
            rounds += 1
            session.wait_quiet(bench.fire(token))
            status = bench.connection.wait_safe()
            if status.held_sweep:
                sweep_id = bytes.fromhex(status.held_sweep)
                session.request("acknowledge", {"sweep_id": sweep_id})
    except LinkError:
        # A port that is kept open may have another name once the tracer is back.
        session.port.close()
        return rounds
    raise StoppedError(f"the power was not pulled within {PULL_S:g} s")


def at_end(bench: Bench, found: Findings) -> None:
    """As it is left."""
    bench.ask(found, Task.DISCONNECT)
    status = bench.connection.wait_safe()
    found.word("state", status.state, "safe")
    found.number("capacitor", status.capacitor_v, "V", high=bench.scales.safe_v)


STEPS = (
    Step(
        "B1",
        "supply connected, contact open",
        (2,),
        f"Watches current and capacitor for {WATCHED_S:g} s with the supply on.",
        contact_open,
    ),
    Step(
        "B2",
        "supply as the tracer sees it",
        (4,),
        "Compares the source's voltage with what the operator has read off.",
        supply_seen,
    ),
    Step(
        "B3",
        "voltage above the limit",
        (4,),
        f"Asks for an arming with a limit {100 * (1 - BELOW):.0f} % below the supply's voltage.",
        over_voltage,
    ),
    Step(
        "B4",
        "leads reversed",
        (5,),
        "Asks for an arming with the leads swapped.",
        reversed_leads,
    ),
    Step(
        "B5",
        "relay alone",
        (2,),
        "Runs the wave of the switch for 0.1 s without energising the relay.",
        relay_alone,
    ),
    Step(
        "B6",
        "whole sweep",
        (1, 2, 3, 6, 10, 15, 16),
        "Sweeps the supply, and measures the capacitor, the bleed and the opening.",
        whole_sweep,
    ),
    Step(
        "B7",
        "current above the limit",
        (6, 16),
        "Sweeps with a limit of half the current that the sweep before has shown, then clears "
        "the fault.",
        over_current,
    ),
    Step(
        "B8",
        "power lost while charged",
        (13, 21),
        "Charges and bleeds until its power is gone, and looks at the state when it is back.",
        power_lost,
    ),
    Step(
        "B9",
        "supply disconnected",
        (),
        "Looks at the tracer once more.",
        at_end,
    ),
)
