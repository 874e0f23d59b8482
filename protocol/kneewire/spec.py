"""The tables of SPEC.md, made from the catalogue: `python -m kneewire.spec protocol/SPEC.md`.

Between the two marks of that file everything is replaced; a test fails when it has drifted.
Runs on CPython only.
"""

from __future__ import annotations

import sys
from pathlib import Path

from kneewire import catalogue, fields, profile_record
from kneewire.meanings import MEANINGS
from kneewire.messages import fingerprint

BEGIN = "<!-- tables: made by python -m kneewire.spec -->"
END = "<!-- end of tables -->"


def tables() -> str:
    """All tables, as Markdown."""
    parts = [
        f"Catalogue {fingerprint():08x}.",
        "### Header",
        _rows("", catalogue.HEADER, {}),
        "### Messages",
    ]
    for kind in sorted(catalogue.MESSAGES):
        name, direction, frozen, changes, rows = catalogue.MESSAGES[kind]
        way = "to the host" if direction == catalogue.TO_HOST else "to the device"
        remarks = [way] + ["frozen"] * frozen + ["changes state"] * changes
        parts.append(f"#### {kind:02x} {name}\n\n{', '.join(remarks)}.")
        parts.append(_rows(name, rows, MEANINGS) if rows else "No fields.")
    parts += ["### Knot record", _rows("knot", catalogue.KNOT, MEANINGS)]
    parts += ["### Profile record", _rows("profile", profile_record.PROFILE, MEANINGS)]
    parts.append("### Codes")
    for title, codes in (
        ("States", catalogue.STATES),
        ("Reset causes", catalogue.RESET_CAUSES),
        ("End reasons", catalogue.END_REASONS),
        ("Refusals", catalogue.REFUSALS),
        ("Units", catalogue.UNITS),
        ("Exercises", catalogue.EXERCISES),
        ("Profile: hazard classes", profile_record.CLASSES),
        ("Profile: contacts", profile_record.CONTACTS),
        ("Profile: converters", profile_record.CONVERTERS),
    ):
        lines = [f"| {code} | {codes[code] or 'none'} |" for code in sorted(codes)]
        parts.append(f"{title}\n\n| code | meaning |\n|---|---|\n" + "\n".join(lines))
    return "\n\n".join(parts)


def _rows(owner: str, rows: tuple[tuple[str, str], ...], meanings: dict[str, str]) -> str:
    lines = ["| offset | field | type | range | meaning |", "|---|---|---|---|---|"]
    place: int | None = 9 if owner in catalogue.KINDS else 0
    for name, kind in rows:
        meaning = meanings.get(f"{owner}.{name}", meanings.get(f"finding.{name}", ""))
        offset = "" if place is None else str(place)
        lines.append(f"| {offset} | {name} | {kind} | {_range(kind)} | {meaning} |")
        size = fields.FIXED.get(kind, (None, None))[0]
        place = None if place is None or size is None else place + size
    return "\n".join(lines)


def _range(kind: str) -> str:
    if kind not in fields.FIXED:
        return ""
    size, signed = fields.FIXED[kind]
    if signed is None:
        return f"{size} bytes"
    if signed:
        return f"-2^{8 * size - 1} to 2^{8 * size - 1} - 1"
    return f"0 to 2^{8 * size} - 1"


def with_tables(text: str) -> str:
    """`text` with what stands between the marks made anew."""
    before, _, rest = text.partition(BEGIN)
    _, _, after = rest.partition(END)
    return f"{before}{BEGIN}\n\n{tables()}\n\n{END}{after}"


if __name__ == "__main__":
    path = Path(sys.argv[1])
    path.write_text(with_tables(path.read_text(encoding="utf-8")), encoding="utf-8")
