"""The states of the firmware as a table and a picture, made from its own table of transitions.

`python tests/device/readme.py` writes the parts of device/README.md between marks, and
device/states.svg, anew; a test fails when they have drifted.
"""

from __future__ import annotations

from collections import defaultdict
from html import escape
from pathlib import Path

from kneewire.catalogue import STATES
from kneewise.emulator.firmware import firmware_module

sequencer = firmware_module("tracer.sequencer")
DEVICE = Path(__file__).resolve().parents[2] / "device"
BEGIN = "<!-- states: made by python tests/device/readme.py -->"
END = "<!-- end of states -->"

# What brings each event about, in the words of the table and of the picture.
EVENTS = {
    "EV_ARM": ("arm", "an arming that all guards grant"),
    "EV_DISARM": ("disarm", "an abort, another session, or the end of the token's life"),
    "EV_FIRE": ("fire", "a fire with the token"),
    "EV_OPENED": ("opened", "the contact is open again"),
    "EV_CHARGED": ("charged", "the capacitor is found charged"),
    "EV_BLED": ("bled", "the capacitor is measured below the start threshold"),
    "EV_FAULT": ("fault", "a guard's finding that latches"),
    "EV_CLEAR": ("clear", "clear_fault"),
    "EV_RESUME": ("resume", "a start, or the way back from the prompt"),
}
ACTIONS = {
    "DO_NOTHING": "",
    "DO_BLEED": "outputs safe; the bleed is watched from its beginning",
    "DO_SAFE": "outputs safe; the bleed goes on being watched",
    "DO_KEEP": "the logbook is written",
}


def _named(prefix: dict[str, object]) -> dict[int, str]:
    return {getattr(sequencer, name): name for name in prefix}


def transitions() -> list[tuple[str, str, str, str]]:
    """(state, event, next state, what is done) by the names above, in the table's order."""
    events, actions = _named(EVENTS), _named(ACTIONS)
    return [
        (STATES[state], events[event], STATES[after], actions[action])
        for (state, event), (after, action) in sequencer.TABLE.items()
    ]


def table() -> str:
    lines = ["| in | on | leads to | and then |", "|---|---|---|---|"]
    for state, event, after, action in transitions():
        lines.append(f"| {state} | {EVENTS[event][1]} | {after} | {ACTIONS[action]} |")
    return "\n".join(lines)


# -- the picture ------------------------------------------------------------------------------

BOX_W, BOX_H = 128, 44
PLACES = {
    "safe": (110, 70),
    "armed": (420, 70),
    "charging": (730, 70),
    "bleeding": (420, 250),
    "fault": (730, 400),
}
# Ways round the boxes: the points of a line, and where its words stand.
WAYS: dict[tuple[str, str], tuple[list[tuple[int, int]], tuple[int, int, str]]] = {
    ("safe", "armed"): ([(174, 60), (356, 60)], (265, 52, "middle")),
    ("armed", "safe"): ([(356, 84), (174, 84)], (265, 100, "middle")),
    ("armed", "charging"): ([(484, 70), (666, 70)], (575, 62, "middle")),
    ("charging", "bleeding"): ([(700, 92), (484, 240)], (640, 160, "start")),
    ("bleeding", "safe"): ([(356, 240), (140, 92)], (276, 166, "start")),
    ("safe", "bleeding"): ([(90, 92), (90, 262), (356, 262)], (98, 254, "start")),
    ("armed", "bleeding"): ([(420, 92), (420, 228)], (428, 150, "start")),
    ("charging", "fault"): ([(750, 92), (750, 378)], (758, 230, "start")),
    ("bleeding", "fault"): ([(470, 272), (470, 390), (666, 390)], (478, 382, "start")),
    ("fault", "bleeding"): ([(666, 414), (400, 414), (400, 272)], (408, 430, "start")),
    ("safe", "fault"): ([(60, 92), (60, 500), (745, 500), (745, 422)], (68, 492, "start")),
    ("armed", "fault"): (
        [(440, 48), (440, 20), (850, 20), (850, 400), (794, 400)],
        (448, 14, "start"),
    ),
}
LOOPS = {"bleeding": (492, 268), "fault": (756, 446)}


def picture() -> str:
    """An SVG drawing of the states and the ways between them."""
    ways: dict[tuple[str, str], list[str]] = defaultdict(list)
    for state, event, after, _ in transitions():
        ways[state, after].append(EVENTS[event][0])
    parts = [
        '<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 900 520" width="900" height="520" '
        'font-family="sans-serif" font-size="14">',
        '<rect width="900" height="520" fill="white"/>',
        '<defs><marker id="tip" viewBox="0 0 10 10" refX="9" refY="5" markerWidth="8" '
        'markerHeight="8" orient="auto"><path d="M0 0 L10 5 L0 10 z" fill="#333"/></marker></defs>',
    ]
    for (state, after), events in ways.items():
        words = ", ".join(events)
        if state == after:
            x, y = LOOPS[state]
            parts.append(f'<text x="{x}" y="{y}" fill="#555">{words}: stays</text>')
            continue
        points, (x, y, anchor) = WAYS[state, after]
        line = " ".join(f"{'M' if n == 0 else 'L'}{px} {py}" for n, (px, py) in enumerate(points))
        parts.append(f'<path d="{line}" fill="none" stroke="#333" marker-end="url(#tip)"/>')
        parts.append(f'<text x="{x}" y="{y}" text-anchor="{anchor}">{escape(words)}</text>')
    for state, (x, y) in PLACES.items():
        fill = {"fault": "#fbe3df", "charging": "#fff1cc"}.get(state, "#e3eef8")
        parts.append(
            f'<rect x="{x - BOX_W // 2}" y="{y - BOX_H // 2}" width="{BOX_W}" height="{BOX_H}" '
            f'rx="6" fill="{fill}" stroke="#333"/>'
        )
        parts.append(
            f'<text x="{x}" y="{y + 5}" text-anchor="middle" font-weight="bold">{state}</text>'
        )
    parts.append("</svg>")
    return "\n".join(parts) + "\n"


def between(text: str, begin: str, end: str, made: str) -> str:
    """`text` with what stands between two marks made anew."""
    before, _, rest = text.partition(begin)
    _, _, after = rest.partition(end)
    return f"{before}{begin}\n\n{made}\n\n{end}{after}"


def page(text: str) -> str:
    """The text of device/README.md with its table made anew."""
    return between(text, BEGIN, END, table())


if __name__ == "__main__":
    readme = DEVICE / "README.md"
    readme.write_text(page(readme.read_text(encoding="utf-8")), encoding="utf-8")
    (DEVICE / "states.svg").write_text(picture(), encoding="utf-8")
