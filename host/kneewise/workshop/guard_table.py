"""The table of guards, made from `kneewire.guards` and `kneewire.hazards`.

Goes out: one row for each of H1 to H21, as data, as text for a terminal and as a Markdown table
for device/README.md.
"""

from __future__ import annotations

import textwrap
from dataclasses import asdict, dataclass
from typing import Any

from kneewire import guards, hazards
from kneewire.hazards import GUARDS, HAZARDS, MEASURED

BEGIN = "<!-- guards: made by python -m kneewise.workshop.pages -->"
END = "<!-- end of guards -->"

ACTIONS = (
    (hazards.REFUSES, "refuses to arm and to fire"),
    (hazards.OPENS, "opens the contact in mid-charge"),
    (hazards.RELEASES, "lets go of the bleed once its allowance of heat is spent"),
    (hazards.BUILT_IN, "built in: no reading decides it"),
)
ONLY_LATCHES = "latches a fault afterwards"
_SCALED = {"mv": ("V", 1e3), "ma": ("A", 1e3), "mj": ("J", 1e3), "mw": ("W", 1e3)}
_PLAIN = {"ms": "ms", "us": "us", "percent": "%", "v": "V", "ohm": "ohm", "nf": "nF"}
# Where a limit is of something else than its own unit says.
_OF = {
    "start_permyriad": " of Voc",
    "near_zero_permyriad": " of rated_ma",
    "bleed_time_percent": " of the predicted time",
    "capacitance_low_percent": " of capacitance_nf",
    "capacitance_high_percent": " of capacitance_nf",
}

# hazard: fields of the profile that decide beside the one in `GUARDS`.
MORE_FIELDS = {
    1: ("safe_mv", "bleed_time_percent"),
    10: ("bleed_mw",),
    15: ("capacitance_low_percent", "capacitance_high_percent"),
}
# hazard: limits that are in the firmware itself, which no profile moves.
CONSTANTS = {
    2: f"{guards.ZERO_CODES} codes of 12 bits at the current channel, {guards.LIVE_LOOKS} looks "
    "10 ms apart",
    10: f"at least {guards.BLEED_LOW_PERCENT} % of bleed_mohm",
    11: f"zeros within {guards.ZERO_CODES} codes of 12 bits; source and capacitor within "
    f"{guards.SENSORS_PERCENT} % of rated_mv",
    19: f"no barrier is asked for up to {guards.ISOLATION_FREE_MV / 1000:g} V",
}


@dataclass(frozen=True, slots=True)
class GuardRow:
    """One guard. `field` is the profile's field that holds its limit, "" for none."""

    hazard: int
    name: str
    measured: str
    field: str
    limit: str
    """The limit in words, with the bounds that no profile may leave."""
    in_a_row: int
    does: tuple[str, ...]
    latches: bool
    cleared: str
    next_step: str


def guard_rows() -> list[GuardRow]:
    """All guards, by number."""
    return [_row(hazard) for hazard in sorted(GUARDS)]


def _row(hazard: int) -> GuardRow:
    field, in_a_row, action = GUARDS[hazard]
    name, _, next_step = HAZARDS[hazard]
    measured, cleared = MEASURED[hazard]
    fields = [one for one in (field, *MORE_FIELDS.get(hazard, ())) if one]
    limits = [_limit(one) for one in fields]
    limits += [CONSTANTS[hazard]] if hazard in CONSTANTS else []
    return GuardRow(
        hazard=hazard,
        name=name,
        measured=measured,
        field=field,
        limit="; ".join(limits) or "none: it is so or not",
        in_a_row=in_a_row,
        does=tuple(words for bit, words in ACTIONS if action & bit) or (ONLY_LATCHES,),
        latches=bool(action & hazards.LATCHES),
        cleared=cleared,
        next_step=next_step,
    )


def _limit(field: str) -> str:
    """The field, and the bounds that the firmware holds every profile to."""
    for name, least, greatest in guards.BOUNDS:
        if name == field:
            return f"{field}, {_said(field, least)} to {_said(field, greatest)}" + _OF.get(
                field, ""
            )
    for name, (class_a, class_b) in (("rated_mv", guards.RATED_MV), ("rated_ma", guards.RATED_MA)):
        if name == field:
            return f"{field}, at most {_said(field, class_a)}, class B {_said(field, class_b)}"
    return field


def _said(field: str, value: int) -> str:
    """A value of the profile's record with its unit, as people read it."""
    unit = field.rpartition("_")[2]
    if unit in _SCALED:
        shown, scale = _SCALED[unit]
        return f"{value / scale:g} {shown}"
    if unit == "permyriad":
        return f"{value / 100:g} %"
    return f"{value} {_PLAIN[unit]}"


# -- ways to show it --------------------------------------------------------------------------


def as_data() -> list[dict[str, Any]]:
    """For `--json`."""
    return [{**asdict(row), "does": list(row.does)} for row in guard_rows()]


def as_text(width: int = 96) -> str:
    """For a terminal, a block for each guard."""
    blocks = []
    for row in guard_rows():
        lines = [f"H{row.hazard:<3} {row.name}"]
        for word, said in (
            ("measured", row.measured),
            ("limit", row.limit),
            ("in a row", str(row.in_a_row)),
            ("does", "; ".join(row.does)),
            ("latches", "yes, until cleared" if row.latches else "no"),
            ("cleared", row.cleared),
            ("to do", row.next_step),
        ):
            lines += textwrap.wrap(
                said,
                width,
                initial_indent=f"     {word:9} ",
                subsequent_indent=" " * 15,
                break_on_hyphens=False,
            )
        blocks.append("\n".join(lines))
    return "\n\n".join(blocks)


def as_markdown() -> str:
    """For device/README.md, between BEGIN and END."""
    lines = [
        "| guard | against | measured | limit: field of the profile, hard bounds | in a row "
        "| does | latches | cleared | what to do |",
        "|---|---|---|---|---|---|---|---|---|",
    ]
    for row in guard_rows():
        cells = (
            f"H{row.hazard}",
            row.name,
            row.measured,
            row.limit,
            str(row.in_a_row),
            "; ".join(row.does),
            "yes" if row.latches else "no",
            row.cleared,
            row.next_step,
        )
        lines.append("| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |")
    return "\n".join(lines)
