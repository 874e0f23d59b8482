"""Hazards that come while the contact is closed: latency, and what the contact's kind allows."""

from collections.abc import Mapping
from typing import Any

from .hazards import (
    BARE,
    BREAKS,
    CHECK_SENSORS,
    CHIP,
    IN_PROCESS,
    MICROPYTHON,
    OWN_PLANT,
    PIN_US,
    RELAY_US,
    RUNGS,
    SLOW,
    SWITCH_US,
    Case,
    H,
)


def higher(n_ns_vt_v: float) -> tuple[str, dict[str, float]]:
    """Above 40 V at once, where the capacitor stands near the Voc of before: 18 A into 0.1 ohm."""
    return "source", {"n_ns_vt_v": n_ns_vt_v, "photocurrent_a": 18.0}


SOURCE = {"n_ns_vt_v": 1.62, "photocurrent_a": 9.2}
BRIGHT = ("source", {"photocurrent_a": 23.0})
RATED = {"limits.rated_v": 40.0}
NEAR_VOC = (11_000, 11_300, 11_600)
PHASES = (1_000, 1_350, 1_700, 2_050)
"""Over a visit of the supervision, so that none of them is the lucky one."""
LINK_US = 10_000
"""The firmware listens by then, at the latest."""
FIRST_LOOK = OWN_PLANT
"""Where it trips at the first look. On the chip nothing has been measured by then that would tell
the firmware that the opening is hot, and it is not counted.
"""
NEARLY_WHOLE = OWN_PLANT
"""Where a bare relay needs nearly all of its time. The count begins with the prediction, and on the
chip that comes 3 ms after the closing.
"""
SILENT_US = 1_000_000
DIM = {"source": {"photocurrent_a": 0.4}, "load": {"capacitance_f": 13e-3}}
"""1.1 s to the knee, longer than a host may be silent here."""
BATTERY = {
    "photocurrent_a": 500.0,
    "saturation_current_a": 1e-39,
    "n_ns_vt_v": 0.5,
    "series_resistance_ohm": 0.05,
    "shunt_resistance_ohm": 1e6,
}
"""48 V behind 0.05 ohm: 330 A into what the plant's leads and parts leave."""

KINDS = (
    ("", {}, {}, {"pin_us": PIN_US, "current_us": PIN_US + SWITCH_US, "hot": 1}, RUNGS),
    (", bare relay", BARE, {}, {"runs_out": True}, RUNGS),
    (
        ", bare relay that breaks",
        BARE,
        BREAKS,
        {"pin_us": PIN_US, "current_us": PIN_US + RELAY_US, "hot": 1},
        (IN_PROCESS, CHIP),
    ),
)
"""Of contacts: (words, board, profile, limits, rungs)."""


def heard(limits: Mapping[str, Any]) -> dict[str, Any]:
    """The limits where bytes must come over the link first."""
    later = {name: us + LINK_US for name, us in limits.items() if name.endswith("_us")}
    return {**limits, **later}


CHARGING = (
    *(
        Case(
            hazard=4,
            title=f"rises above the rating in mid-charge{words}",
            injected="the source goes to 18 A near the end of a charge, and above the 40 V of the "
            "rating: to 50 V, or to 41 V where the charge is to run out",
            rungs=NEARLY_WHOLE if "runs_out" in limits else rungs,
            scenario={"board": board},
            profile=RATED | profile,
            strikes=higher(2.0 if limits.get("hot") else 1.66),
            at_us=NEAR_VOC,
            end_reason="over-voltage",
            told=(H[4], r", 4[0-9]\.\d+ V; expected at most 40\.000 V\. Next: disconnect"),
            clear_while_wrong="arming refused",
            mended=(("source", SOURCE),),
            **limits,
        )
        for words, board, profile, limits, rungs in KINDS
    ),
    Case(
        hazard=6,
        title="above the rating from the first",
        injected="a source of 23 A, which no reading shows before the contact closes",
        rungs=FIRST_LOOK,
        scenario={"source": {"photocurrent_a": 23.0}},
        end_reason="over-current",
        told=(H[6],),
        pin_us=PIN_US,
        current_us=PIN_US + SWITCH_US,
        hot=1,
        clear_while_wrong="next sweep latches",
        mended=(("source", {"photocurrent_a": 9.2}),),
    ),
    *(
        Case(
            hazard=6,
            title=f"rises above the rating in mid-charge{words}",
            injected="the light more than doubles: 23 A",
            rungs=rungs,
            scenario={"board": board},
            profile=profile,
            strikes=BRIGHT,
            at_us=PHASES,
            end_reason="over-current",
            told=(H[6],),
            mended=(("source", {"photocurrent_a": 9.2}),),
            **limits,
        )
        for words, board, profile, limits, rungs in KINDS
    ),
    Case(
        hazard=7,
        title="interpreter hangs",
        injected="the firmware hangs 2 ms after closing, on a disconnected source: an exercise",
        play="hang",
        scenario={"source": {"photocurrent_a": 0.0}},
        told=(
            r"reset after it was told to fire \(cause: watchdog\).*Next: .*measure the capacitor",
        ),
        latched=False,
        pin_us=5000 + 1000,
        current_us=5000 + 1000 + SWITCH_US,
    ),
    Case(
        hazard=7,
        title="interpreter hangs, bare relay",
        injected="the same; the one pulse that the relay was given ends with the time asked for",
        play="hang",
        rungs=(IN_PROCESS, CHIP),
        scenario={"source": {"photocurrent_a": 0.0}, "board": BARE},
        told=(r"reset after it was told to fire \(cause: watchdog\)",),
        latched=False,
        pin_us=500_000,
        current_us=500_000 + RELAY_US,
    ),
    *(
        Case(
            hazard=7,
            title=f"supervision stops{words}",
            injected="no visit of the supervision comes any more",
            play="supervision",
            rungs=OWN_PLANT,
            scenario={"board": board},
            profile=profile,
            end_reason="supervision lost",
            told=(H[7],),
            **limits | ({"pin_us": 5000, "current_us": 5000 + more} if more else {}),
        )
        for (words, board, profile, limits, _), more in zip(
            KINDS, (SWITCH_US, 0, RELAY_US), strict=True
        )
    ),
    *(
        Case(
            hazard=8,
            title=f"host silent{words}",
            injected="nothing is heard after the fire for 1 s, of a charge of 1.8 s",
            play="silent",
            rungs=rungs if not profile and not board else (IN_PROCESS, CHIP),
            scenario=DIM | {"board": board},
            profile={"limits.rated_a": 10.0, "limits.heartbeat_lost_s": 1.0} | profile,
            at_us=(SILENT_US,),
            end_reason="host lost",
            latched=False,
            mended=(("source", {"photocurrent_a": 9.2}),),
            **limits,
        )
        for words, board, profile, limits, rungs in KINDS
    ),
    Case(
        hazard=8,
        title="host silent for the default time",
        injected="nothing is heard after the fire for 2 s",
        play="silent",
        rungs=(IN_PROCESS, CHIP),
        scenario={"source": {"photocurrent_a": 0.2}, "load": {"capacitance_f": 13e-3}},
        profile={"limits.rated_a": 10.0},
        at_us=(2 * SILENT_US,),
        end_reason="host lost",
        latched=False,
        pin_us=PIN_US,
        current_us=PIN_US + SWITCH_US,
        hot=1,
        mended=(("source", {"photocurrent_a": 9.2}),),
    ),
    *(
        Case(
            hazard=12,
            title=f"opened in mid-charge{words}",
            injected="the lid is opened",
            rungs=NEARLY_WHOLE if "runs_out" in limits else rungs,
            scenario={"board": board},
            profile=profile,
            strikes=("stop_loop", 1),
            at_us=(5_300, 5_600, 5_900),
            end_reason="stop loop opened",
            told=(H[12],),
            mended=(("stop_loop", 0),),
            **limits,
        )
        for words, board, profile, limits, rungs in KINDS
    ),
    *(
        Case(
            hazard=11,
            title=f"{channel} channel sticks in mid-charge",
            injected=f"the {channel} channel reads code {code} from then on",
            scenario={},
            strikes=(f"{channel}_stuck", code),
            end_reason="complete",
            told=(H[11], rf", {volts} V; expected (?:within|at most) 3\.600 V", CHECK_SENSORS),
            clear_while_wrong=again,
            mended=((f"{channel}_stuck", None),),
        )
        for channel, code, volts, again in (
            ("voltage", 1000, r"23\.\d+", "arming refused"),
            ("capacitor", 24, r"-39\.\d+", "next sweep latches"),
        )
    ),
    Case(
        hazard=11,
        title="voltage channel at its rail in mid-charge",
        injected="the voltage channel reads code 4095, which may hide any voltage",
        strikes=("voltage_stuck", 4095),
        at_us=PHASES,
        end_reason="over-voltage",
        told=(H[4], r", 67\.\d+ V; expected at most 60\.000 V"),
        pin_us=PIN_US,
        current_us=PIN_US + SWITCH_US,
        hot=1,
        clear_while_wrong="arming refused",
        mended=(("voltage_stuck", None),),
    ),
    Case(
        hazard=13,
        title="power lost in mid-charge and back",
        injected="power fails 40 ms after closing and returns 50 ms later",
        play="brown-out",
        scenario={"load": SLOW},
        strikes=("power_off", 1),
        at_us=(40_000,),
        told=(
            r"reset after it was told to fire \(cause: power on\).*Next: .*measure the capacitor",
        ),
        latched=False,
        current_us=SWITCH_US,
        hot=1,
    ),
    *(
        Case(
            hazard=16,
            title=f"aborted in mid-charge{words}",
            injected="the operator stops it 20 ms after closing; the count outlives a power cycle",
            rungs=rungs,
            play="abort",
            scenario={"load": SLOW, "board": board},
            profile=profile,
            at_us=(20_000,),
            end_reason="aborted",
            latched=False,
            **heard(limits),
        )
        for words, board, profile, limits, rungs in KINDS[:2]
    ),
    Case(
        hazard=16,
        title="complete",
        injected="nothing: a sweep that ends by itself opens cold, and is not counted as hot",
        end_reason="complete",
        latched=False,
    ),
    Case(
        hazard=17,
        title="asked to leave in mid-charge",
        injected="`prompt` 20 ms after closing; the update itself, to be refused unless safe and "
        "bled, does not exist yet",
        play="prompt",
        scenario={"load": SLOW},
        at_us=(20_000,),
        end_reason="complete",
        latched=False,
    ),
    Case(
        hazard=18,
        title="soft reset in mid-charge",
        injected="Ctrl-C and Ctrl-D 20 ms after closing: the firmware is loaded anew",
        play="soft reset",
        rungs=(IN_PROCESS, CHIP),
        scenario={"load": SLOW},
        at_us=(20_000,),
        latched=False,
        pin_us=PIN_US,
        current_us=PIN_US + SWITCH_US,
        hot=1,
    ),
    Case(
        hazard=18,
        title="outputs stuck",
        injected="relay and bleed coil left on at the prompt, as a soft reset leaves pins; then "
        "main.py (in the MicroPython process, where Ctrl-D would end it, without the reset)",
        play="outputs stuck",
        rungs=(MICROPYTHON, CHIP),
        latched=False,
    ),
    Case(
        hazard=20,
        title="a battery, although confirmed",
        injected="48 V behind 0.05 ohm: more than 100 A must be broken by the switch; a fuse must "
        "interrupt what the battery can drive for good, since a switch that fails short cannot",
        rungs=FIRST_LOOK,
        scenario={"source": BATTERY, "load": {"capacitance_f": 6e-3}},
        profile={"limits.rated_v": 58.0},
        end_reason="over-current",
        told=(H[6],),
        pin_us=PIN_US,
        current_us=PIN_US + SWITCH_US,
        hot=1,
        mended=None,
    ),
)
