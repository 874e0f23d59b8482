"""The hazards by number: what a person is told of each.

Refusals and faults carry the number with the measured value and the limit; these texts are
what the host shows with them. The firmware itself needs the numbers alone. Limits in code are in
`guards.py`.
"""

from kneewire.guards import LIVE_LOOKS, TRIP_PAIRS

# What a guard does, bits of a row's last number.
REFUSES = 1  # before closing: arming and firing are refused
OPENS = 2  # in mid-charge: the contact opens, by its kind's rule
LATCHES = 4  # a fault until it is cleared
RELEASES = 8  # the bleed is let go once its allowance is spent
BUILT_IN = 16  # by construction or wiring; no reading decides it

# hazard: (profile field that holds the limit or "", seen in a row, what it does)
GUARDS = {
    1: ("start_permyriad", 1, REFUSES | LATCHES),
    2: ("bleed_mj", LIVE_LOOKS, LATCHES | RELEASES),
    3: ("dead_time_ms", 1, BUILT_IN),
    4: ("rated_mv", TRIP_PAIRS, REFUSES | OPENS | LATCHES),
    5: ("", 1, REFUSES),
    6: ("rated_ma", TRIP_PAIRS, OPENS | LATCHES),
    7: ("pulse_us", 1, OPENS | LATCHES),
    8: ("heartbeat_lost_ms", 1, OPENS),
    9: ("token_life_ms", 1, REFUSES),
    10: ("bleed_mj", 1, REFUSES | LATCHES),
    11: ("", 1, REFUSES | OPENS | LATCHES),
    12: ("", 1, REFUSES | OPENS | LATCHES),
    13: ("", 1, BUILT_IN),
    14: ("", 1, REFUSES),
    15: ("capacitance_nf", 1, LATCHES),
    16: ("near_zero_permyriad", 1, BUILT_IN),
    17: ("", 1, BUILT_IN),
    18: ("", 1, BUILT_IN),
    19: ("isolation_v", 1, REFUSES),
    20: ("", 1, REFUSES),
    21: ("permanent_bleeder_ohm", 1, BUILT_IN),
}

# number: (name, what was wrong, what to do)
HAZARDS = {
    1: (
        "capacitor still charged",
        "the capacitor's voltage is too high",
        "keep away from the terminals, let it bleed, measure it yourself before touching",
    ),
    2: (
        "contact welded or switch shorted",
        "the source feeds the capacitor while the contact is commanded open",
        "LIVE: isolate at the disconnector, then replace the contact or the switch",
    ),
    3: (
        "contact and bleed on together",
        "the bleed would lie across the source",
        "check the wiring of contact and bleed; they exclude each other in the firmware",
    ),
    4: (
        "source above the rated voltage",
        "the source's voltage is above the limit",
        "disconnect the source; trace it with a tracer rated for it",
    ),
    5: (
        "leads reversed",
        "the comparator sees plus and minus swapped",
        "isolate the source, then swap the leads",
    ),
    6: (
        "current above the rating",
        "the current went above the limit",
        "check that the source is a single PV source within the rating",
    ),
    7: (
        "supervision stopped",
        "the supervision did not advance while the contact was closed",
        "power the tracer off and on; if it returns, flash it again",
    ),
    8: (
        "host vanished",
        "nothing was heard from the host",
        "keep the host awake and connected during long sweeps",
    ),
    9: (
        "stray or corrupt command",
        "a request without the right session, token or CRC",
        "arm and fire again from one program; check the cable if it returns",
    ),
    10: (
        "bleed resistor overheats",
        "the bleed resistor has taken up more heat than it may, or its resistance is too low",
        "let it cool for the time shown; check the resistor if the finding is in ohms",
    ),
    11: (
        "sensor open, shorted or stuck",
        "a channel does not read what it must",
        "isolate the source, check sense leads, shunt amplifier and capacitor divider, sweep again",
    ),
    12: (
        "lid or stop switch open",
        "the stop loop is open",
        "close the lid, release the stop switch, then clear the fault",
    ),
    13: (
        "reset or brown-out while charging",
        "the tracer was reset; it has started with the contact open and the bleed engaged",
        "measure the capacitor, find the cause of the reset, then sweep again",
    ),
    14: (
        "no valid profile",
        "the stored profile is missing, damaged or made for another board",
        "store the profile of this board",
    ),
    15: (
        "capacitor aged, wrong or reversed",
        "the capacitance is outside the profile's limits",
        "isolate and discharge, then measure the capacitor; replace it or correct the profile",
    ),
    16: (
        "opening under load",
        "the contact opened while current was flowing",
        "compare the count of hot openings with the contact's rated life",
    ),
    17: (
        "update during a sweep",
        "the tracer is not safe and bled",
        "wait until it is safe, then update",
    ),
    18: (
        "output stuck after a soft reset",
        "an output kept its level over a restart",
        "store main.py on the board again: its first lines drive every output low",
    ),
    19: (
        "isolation not declared",
        "above 60 V dc a declared and tested isolation barrier is needed",
        "have the barrier tested and declare its rating and date in the profile",
    ),
    20: (
        "source not confirmed to stand alone",
        "the operator has not confirmed that nothing else feeds the source's terminals",
        "isolate battery, inverter and parallel strings, then confirm",
    ),
    21: (
        "power lost while charged",
        "the capacitor keeps its charge when the tracer loses power",
        "keep away from the terminals until the voltage indicator is dark; measure it yourself",
    ),
}

# number: (what is measured, how it is cleared)
MEASURED = {
    1: (
        "capacitor voltage, before closing and while bleeding",
        "before closing by the capacitor's fall; as a fault by an explicit clear",
    ),
    2: (
        "current with the contact commanded open; fall of the capacitor",
        "by an explicit clear, with the source isolated and the bleed cool",
    ),
    3: ("what was commanded, at every change", "cannot be entered"),
    4: ("source voltage, before closing and 1000 times a second", "by an explicit clear"),
    5: ("comparator across the leads", "by swapping the leads"),
    6: ("current, 1000 times a second while closed", "by an explicit clear"),
    7: ("supervision visits and the ring's progress, before every renewal", "by an explicit clear"),
    8: ("time since the host was last heard, while closed", "by itself; the sweep is kept"),
    9: ("CRC, session, sequence and token of a request", "by itself"),
    10: (
        "heat in the bleed resistor, by account; its resistance, from the decay",
        "by time, then an explicit clear",
    ),
    11: (
        "zeros before closing, source against capacitor afterwards, codes at a rail",
        "by an explicit clear",
    ),
    12: (
        "stop loop, 1000 times a second while closed",
        "by closing the loop, then an explicit clear",
    ),
    13: ("reset cause and capacitor voltage, at every start", "by the bleed"),
    14: ("CRC, board and bounds of the profile, at every start", "by storing a profile"),
    15: ("charge of the sweep over the capacitor's rise", "by an explicit clear"),
    16: ("current when the contact opens", "counted, kept over power cycles"),
    17: ("nothing: while charging only `abort` is obeyed", "cannot be entered"),
    18: ("nothing: main.py drives every output low first", "cannot be entered"),
    19: ("source voltage against the declared barrier", "by declaring the barrier"),
    20: ("the operator's word, once a connection", "by confirming it"),
    21: ("nothing: pulls and the permanent bleeder need no power", "by the permanent bleeder"),
}
