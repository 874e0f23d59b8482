"""The hazards by number: the name of each, and what a person does about it.

Refusals and faults carry the number with the measured value and the limit; these texts are
what the host shows with them. The firmware itself needs the numbers alone.
"""

# number: (name, what was wrong, what to do)
HAZARDS = {
    1: (
        "capacitor still charged",
        "the capacitor's voltage is too high",
        "keep away from the terminals, let it bleed, measure it yourself before touching",
    ),
    2: (
        "contact welded or switch shorted",
        "the capacitor does not fall while the contact is commanded open",
        "LIVE: isolate at the disconnector, then replace the contact or the switch",
    ),
    4: (
        "source above the rated voltage",
        "the source's voltage is above the build's rating",
        "disconnect the source; trace it with a tracer rated for it",
    ),
    5: (
        "leads reversed",
        "the comparator sees plus and minus swapped",
        "isolate the source, then swap the leads",
    ),
    6: (
        "current above the rating",
        "the current went above the build's rating",
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
    11: (
        "sensor open, shorted or stuck",
        "a channel does not read what it must with the contact open",
        "check the sense leads and the shunt amplifier, then sweep again",
    ),
    12: (
        "lid or stop switch open",
        "the stop loop is open",
        "close the lid, release the stop switch, then clear the fault",
    ),
    14: (
        "no valid profile",
        "the stored profile is missing, damaged or made for another board",
        "store the profile of this board",
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
}
