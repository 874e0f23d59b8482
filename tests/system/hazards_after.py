"""Hazards that show while the capacitor is bled, or that a power cut leaves behind."""

from .hazards import BARE, ISOLATE, LEAK, SWITCH_US, Case, H

AFTER = (
    Case(
        hazard=1,
        title="bleed open after the sweep",
        injected="the bleed resistor breaks in mid-charge",
        scenario={"load": LEAK | {"capacitance_f": 220e-6}},
        strikes=("bleed_open", 1),
        at_us=(500,),
        end_reason="complete",
        told=(H[1],),
        mended=(("bleed_open", 0),),
    ),
    *(
        Case(
            hazard=2,
            title=f"welds in mid-charge{words}",
            injected="the contact welds; the bleed burns until it has had its allowance",
            play="weld",
            scenario={"load": LEAK, "board": board},
            profile={"bleed.power_w": 5.0},
            strikes=("weld", 1),
            end_reason="complete",
            told=(H[2], ISOLATE),
            mended=(("weld", 0),),
        )
        for words, board in (("", {}), (", bare relay", BARE))
    ),
    Case(
        hazard=2,
        title="welded for ten minutes, just after a reset",
        injected="the contact is welded when the tracer gets power, and stays so; what the bleed "
        "takes until it is let go, and in ten minutes (MicroPython 20 s, the chip 10 s)",
        play="welded for minutes",
        scenario={"board": {"contact_welded": True}},
        closes=False,
        told=(H[2], ISOLATE),
    ),
    *(
        Case(
            hazard=3,
            title=f"never together{words}",
            injected="nothing: the record of a sweep, from which contact and bleed are told apart",
            play="dead times",
            scenario={"board": board},
            end_reason="complete",
            latched=False,
        )
        for words, board in (("", {}), (", bare relay", BARE))
    ),
    Case(
        hazard=10,
        title="bleed shorted",
        injected="the bleed resistor shorts in mid-charge, to a thousandth of it",
        strikes=("bleed_short", 1),
        end_reason="complete",
        told=(H[10], r", \d{2,4} mohm; expected .*70000 mohm\. Next: .*check the resistor"),
        clear_while_wrong="next sweep latches",
        mended=(("bleed_short", 0),),
    ),
    Case(
        hazard=10,
        title="bleed of half its resistance",
        injected="a resistor of 50 ohm in the place of 100",
        scenario={"load": {"bleed_of_nominal": 0.5}},
        end_reason="complete",
        told=(H[10], r", (49|50|51)\d{3} mohm; expected .*70000 mohm\. Next: .*check the resistor"),
        clear_while_wrong="next sweep latches",
        mended=None,
    ),
    Case(
        hazard=15,
        title="capacitor of half its value",
        injected="a capacitor of 1.1 mF in the place of 2.2",
        scenario={"load": {"capacitance_of_nominal": 0.5}},
        end_reason="complete",
        told=(H[15], r", 1[01]\d{5} nF; expected .*1540000 nF\. Next: isolate and discharge"),
        clear_while_wrong="next sweep latches",
        mended=None,
    ),
    *(
        Case(
            hazard=21,
            title=f"power lost while charged{words}",
            injected=f"power fails 9 ms after closing{words}: nothing drives a pin",
            play="power lost",
            scenario={"load": load, "board": {"bleed_open": bool(open_)}},
            strikes=("power_off", 1),
            at_us=(9_000,),
            latched=False,
            current_us=SWITCH_US,
            hot=1,
        )
        for words, load, open_ in (("", {}, 0), (", bleed open", LEAK, 1))
    ),
)
