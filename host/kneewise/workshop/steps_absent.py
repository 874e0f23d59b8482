"""The steps of a proof test that want the source absent."""

from __future__ import annotations

from binascii import crc32

import numpy as np

from kneewire import catalogue, guards
from kneewise.errors import LinkError, RefusedError
from kneewise.instrument.hands import Task
from kneewise.instrument.profile import read_record
from kneewise.workshop.bench import Bench, ended, guard_of, refusal
from kneewise.workshop.evidence import Findings, Step

ALONE = (
    "Nothing but what this test asks for will be connected to the source terminals: no battery, "
    "no inverter, no parallel string."
)
TRIES = 3
READINGS = 32
NOISE_CODES = 3.0
"""Greatest standard deviation of a code (12 bits): the firmware takes 8 codes above the zero for
current, which noise must never reach twice in a row."""
TOKEN_MARGIN_S = 0.5
WATCHDOG_S = 2.0
BARE_WATCHDOG_S = 7.5
RESET_MARGIN_S = 5.0  # for the start of the firmware, and of USB
SILENT_S = 0.5
LOOK_S = 0.1
EMPTY_V = 0.5  # that an absent source may leave on the capacitor


def source_absent(bench: Bench, found: Findings) -> None:
    """Before anything is tested."""
    bench.confirm(found, ALONE)
    found.word("the operator confirmed", "yes")
    limit_v = guards.ABSENT_MV / 1000
    for _ in range(TRIES):
        bench.ask(found, Task.DISCONNECT)
        status = bench.connection.wait_safe()
        if abs(status.source_v) < limit_v:
            break
        bench.operator.tell(f"    the tracer still sees {status.source_v:.1f} V")
    found.number("source", status.source_v, "V", low=-limit_v, high=limit_v)
    found.number("capacitor", status.capacitor_v, "V", high=EMPTY_V)


def profile_valid(bench: Bench, found: Findings) -> None:
    """H14."""
    connection = bench.connection
    hello, record = connection.device, connection.record
    values = read_record(record)
    device_id = hello["device_id"].hex()
    found.word("profile", values["name"])
    found.word("CRC of the record", f"{crc32(record):08x}", f"{hello['profile_crc']:08x}")
    found.word("made for board", values["device_id"], device_id)
    for name, least, greatest in guards.BOUNDS:
        if not least <= values[name] <= greatest:
            found.number(name, values[name], low=least, high=greatest)
    letter = values["hazard_class"] - 1
    found.number("rated voltage", values["rated_mv"] / 1e3, "V", high=guards.RATED_MV[letter] / 1e3)
    found.number("rated current", values["rated_ma"] / 1e3, "A", high=guards.RATED_MA[letter] / 1e3)
    stored_j = 0.5e-9 * values["capacitance_nf"] * (values["rated_mv"] / 1e3) ** 2
    found.number("energy at it", stored_j, "J", high=guards.STORED_MJ[letter] / 1e3)


def zeros_and_noise(bench: Bench, found: Findings) -> None:
    """H11: with nothing connected every channel stands at its zero, and moves a little."""
    values = [bench.session.request("status").values for _ in range(READINGS)]
    profile = bench.profile
    for channel, finer in (("voltage", bench.finer), ("current", bench.finer), ("capacitor", 1)):
        means = np.array([one[f"{channel}_sum"] / one["conversions"] for one in values])
        off = float(means.mean()) - profile[f"{channel}_zero_x16"] / 16
        limit = guards.ZERO_CODES * finer
        found.number(f"{channel}: off its zero", off, "codes", low=-limit, high=limit)
        # A mean of n codes scatters by one over the root of n.
        noise = float(means.std(ddof=1)) * values[0]["conversions"] ** 0.5
        found.number(
            f"{channel}: noise", noise, "codes", low=0.01 * finer, high=NOISE_CODES * finer
        )


def stop_loop(bench: Bench, found: Findings) -> None:
    """H12."""
    found.word("stop loop before", _loop(bench), "closed")
    bench.ask(found, Task.OPEN_LOOP)
    found.word("stop loop once opened", _loop(bench), "open")
    error = refusal(lambda: bench.arm("source absent"))
    found.word("arming was refused by", guard_of(error), "H12")
    bench.disarm()
    bench.ask(found, Task.CLOSE_LOOP)
    found.word("stop loop once closed", _loop(bench), "closed")
    error = refusal(lambda: bench.arm("source absent"))
    found.word("arming was then refused by", guard_of(error), "none")
    bench.disarm()


def unconfirmed(bench: Bench, found: Findings) -> None:
    """H20."""
    bench.connection.greet_anew()
    error = refusal(lambda: bench.arm("source absent", confirmed=False))
    found.word("arming without the operator's word was refused by", guard_of(error), "H20")
    bench.disarm()


def _loop(bench: Bench) -> str:
    return "closed" if bench.tracer.status().stop_loop_closed else "open"


def tokens(bench: Bench, found: Findings) -> None:
    """H9."""
    before, _ = bench.operations()
    token = bench.arm("source absent")
    found.word("fire with a wrong token", _fired(bench, token ^ 1), "refused: bad token")
    found.word("fire with the token so spent", _fired(bench, token), "refused: wrong state")
    token = bench.arm("source absent")
    life_s = bench.profile["token_life_ms"] / 1e3
    bench.sleep(life_s + TOKEN_MARGIN_S)
    found.word(
        f"fire {life_s + TOKEN_MARGIN_S:g} s after arming, token life {life_s:g} s",
        _fired(bench, token),
        "refused: wrong state",
    )
    after, _ = bench.operations()
    found.number("closings of the contact meanwhile", after - before, high=0)
    found.word("contact", _contact(bench), "open")
    bench.disarm()


def _fired(bench: Bench, token: int) -> str:
    error = refusal(lambda: bench.fire(token))
    return "accepted" if error is None else f"refused: {catalogue.REFUSALS[error.code]}"


def _contact(bench: Bench) -> str:
    return "closed" if bench.tracer.status().contact_closed else "open"


def closing(bench: Bench, found: Findings) -> None:
    """H3, H16: the contact closes on nothing and opens again."""
    closings, hot = bench.operations()
    charged = bench.charge("source absent")
    values = charged.manifest.values
    profile = bench.profile
    ended(found, charged, "no current")
    now_closings, now_hot = bench.operations()
    found.number("closings counted", now_closings - closings, low=1, high=1, of=(16,))
    found.number("openings under load counted", now_hot - hot, high=0, of=(16,))
    apart_ms = (values["opened_us"] - charged.ended_us) / 1e3
    least_ms = profile["relay_release_ms"] + profile["dead_time_ms"]
    found.number("from the last pair to the bleed engaged", apart_ms, "ms", low=least_ms, of=(3,))
    found.word("contact", "closed" if charged.status.contact_closed else "open", "open")
    found.word("bleed", "engaged" if charged.status.bleed_engaged else "released", "engaged")
    found.number("capacitor", charged.status.capacitor_v, "V", high=EMPTY_V)


def watchdog(bench: Bench, found: Findings) -> None:
    """H7, H13: a firmware that hangs with the contact closed."""
    connection = bench.connection
    nonce = connection.device["boot_nonce"]
    connection.wait_safe()
    token = bench.arm("hang while closed")
    clock = bench.session.port.clock
    begun_s = clock()
    bench.fire(token)
    within_s = (BARE_WATCHDOG_S if bench.bare else WATCHDOG_S) + RESET_MARGIN_S
    _until_reset(bench, nonce, within_s)
    took_s = clock() - begun_s
    hello = connection.device
    new = hello["boot_nonce"] != nonce
    found.word("firmware started anew", "yes" if new else "no", "yes", (7,))
    found.number("from fire to its answer", took_s, "s", high=within_s, of=(7,))
    cause = catalogue.RESET_CAUSES.get(hello["reset_cause"], "unknown")
    found.word("reset cause", cause, "watchdog", (7, 13))
    status = bench.tracer.status()
    found.word("contact", "closed" if status.contact_closed else "open", "open")
    found.word("bleed", "engaged" if status.bleed_engaged else "released", "engaged")
    found.number("capacitor", status.capacitor_v, "V", high=EMPTY_V)
    connection.wait_safe()


def _until_reset(bench: Bench, nonce: int, within_s: float) -> None:
    """Until another boot answers, or this one has answered for so long. LinkError for none."""
    connection = bench.connection
    clock = bench.session.port.clock
    end_s = clock() + within_s
    while connection.device["boot_nonce"] == nonce and clock() < end_s:
        try:
            bench.session.request("status", deadline_s=SILENT_S)
            bench.sleep(LOOK_S)
        except (LinkError, RefusedError):
            # Silent while it hangs; once reset, without a link or without its session.
            connection.rejoin(max(end_s - clock(), 0.0))


STEPS = (
    Step(
        "A0",
        "source absent",
        (),
        f"Verifies that the source terminals show less than {guards.ABSENT_MV / 1000:g} V.",
        source_absent,
    ),
    Step(
        "A1",
        "profile",
        (14,),
        "Reads the profile's record, its CRC, its board and its bounds.",
        profile_valid,
    ),
    Step(
        "A2",
        "zeros and noise",
        (11,),
        f"Reads all channels {READINGS} times with nothing connected.",
        zeros_and_noise,
    ),
    Step(
        "A3",
        "stop loop",
        (12,),
        "Looks at the stop loop and asks for an arming with the loop open, then closed.",
        stop_loop,
    ),
    Step(
        "A4",
        "arming without the operator's word",
        (20,),
        "Asks for an arming in a new session, in which nobody has confirmed that the source "
        "stands alone.",
        unconfirmed,
    ),
    Step(
        "A5",
        "tokens",
        (9,),
        "Fires with a wrong token, with a spent one and with one that is too old.",
        tokens,
    ),
    Step(
        "A6",
        "closing on nothing",
        (3, 16),
        "Closes the contact on the absent source and opens it again.",
        closing,
    ),
    Step(
        "A7",
        "firmware that hangs",
        (7, 13),
        "Has the firmware hang with the contact closed, and waits for the watchdog.",
        watchdog,
    ),
)
