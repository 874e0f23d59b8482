"""The cautions: their words, and who has acknowledged them.

Comes in: which tracer, with which profile. Goes out: the words for the command line and for the
pages that hold them, and a small JSON file in the user's state folder, so that they are asked for
once for each tracer and profile. It is written beside the old one and renamed over it.
"""

from __future__ import annotations

import json
import logging
import os
import tempfile
import textwrap
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from platformdirs import user_state_path

from kneewise.errors import RefusedError

log = logging.getLogger(__name__)
log.addHandler(logging.NullHandler())

WIDTH = 98
EDITION = 1
"""Counted up where a caution says more than before: what was acknowledged then does not count."""

LEAD = (
    "Charged capacitors and PV sources can injure and start fires. Local codes and licensed "
    "practice come first; nothing here replaces them."
)
REMINDER = (
    "Caution: a PV source in light is live, and a charged capacitor can injure. Local codes and "
    "licensed practice come first."
)


@dataclass(frozen=True, slots=True)
class Caution:
    """What to heed, and where that comes from."""

    text: str
    source: str


CAUTIONS = (
    Caution(
        "A PV source in light cannot be switched off. Isolate the module at its disconnector, and "
        "cover it or work at low light, before you touch a terminal.",
        "IEC 60364-7-712",
    ),
    Caution(
        "Use leads, connectors, fuses and disconnectors that are rated for the source's dc voltage "
        "and current, and a barrier between the PV side and the laptop.",
        "IEC 60364-7-712, IEC 61010-1",
    ),
    Caution(
        "Never unplug a connector under load: a dc arc does not go out by itself.",
        "IEC 60364-7-712",
    ),
    Caution(
        "The capacitor stays charged after a sweep until the bleed has emptied it. Wait for the "
        "measured discharge, and measure it yourself before touching: what Kneewise shows is a "
        "reading, not a permission.",
        "IEC 61010-1",
    ),
    Caution(
        "60 V dc and above is for qualified people only, 35 V in the wet. Kneewise documents class "
        "A builds only: one module, cold Voc up to 60 V dc, 20 A, 25 J.",
        "IEC 61010-1",
    ),
    Caution(
        "Only a single PV source may feed the terminals: no battery, no inverter, no parallel "
        "string. They can drive hundreds of amperes through a closed contact.",
        "common practice",
    ),
)
SOURCES = "Standards are named from memory; their text was not read for these cautions."

BEGIN = "<!-- cautions: made by python -m kneewise.workshop.pages -->"
END = "<!-- end of cautions -->"


def as_text() -> str:
    """For a terminal."""
    lines = [_wrapped(LEAD), ""]
    for number, caution in enumerate(CAUTIONS, 1):
        lines.append(_wrapped(f"{caution.text} ({caution.source})", f"  {number}. ", "     "))
    return "\n".join([*lines, "", SOURCES])


def as_markdown() -> str:
    """For README.md and device/README.md, between BEGIN and END."""
    points = "\n".join(
        _wrapped(f"{caution.text} ({caution.source})", "- ", "  ") for caution in CAUTIONS
    )
    return "\n\n".join((_wrapped(f"**{LEAD}**"), points, _wrapped(SOURCES)))


def _wrapped(text: str, first: str = "", rest: str = "") -> str:
    return textwrap.fill(
        text, WIDTH, initial_indent=first, subsequent_indent=rest, break_on_hyphens=False
    )


# -- acknowledgements -------------------------------------------------------------------------


def acknowledgements_file() -> Path:
    """In the user's state folder."""
    return user_state_path("kneewise", appauthor=False) / "cautions.json"


def read_file(path: Path) -> tuple[list[dict[str, Any]], str]:
    """(what was acknowledged, "" or what is wrong with the file: nothing counts then)."""
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
        found = content["acknowledged"]
        if all(isinstance(entry["device_id"], str) for entry in found):
            return list(found), ""
        return [], "a device_id that is no text"
    except FileNotFoundError:
        return [], ""
    except (OSError, ValueError, KeyError, TypeError) as error:
        return [], f"{type(error).__name__}: {error}"


def write_file(path: Path, entries: list[dict[str, Any]]) -> None:
    """Whole or not at all. OSError."""
    path.parent.mkdir(parents=True, exist_ok=True)
    content = {
        "about": "Cautions of Kneewise that were acknowledged, one entry for each tracer and "
        "profile. Delete this file to be asked again.",
        "acknowledged": entries,
    }
    handle, beside = tempfile.mkstemp(dir=path.parent, prefix=path.name, suffix=".new")
    try:
        with os.fdopen(handle, "w", encoding="utf-8") as file:
            file.write(json.dumps(content, indent=2) + "\n")
            file.flush()
            os.fsync(file.fileno())
        os.replace(beside, path)
    except BaseException:
        Path(beside).unlink(missing_ok=True)
        raise


class Acknowledgement:
    """Of one tracer with one profile. `wanted`: False for what is emulated or replayed.

    `remark` is for people: a damaged file, or one that could not be written.
    """

    def __init__(
        self, device_id: str, profile_crc: int, *, wanted: bool, path: Path | None = None
    ) -> None:
        self._entry = {
            "device_id": device_id,
            "profile_crc": f"{profile_crc:08x}",
            "edition": EDITION,
        }
        self.path = path or acknowledgements_file()
        self.remark = ""
        self.due = False
        """True until they are acknowledged."""
        if wanted:
            entries, wrong = read_file(self.path)
            self.due = not any(self._entry.items() <= entry.items() for entry in entries)
            if wrong:
                self._say(f"{self.path} is damaged ({wrong}): nothing counts as acknowledged")

    def give(self) -> None:
        """The user has read the cautions. Where that cannot be kept it holds for this connection,
        and `remark` says so.
        """
        if not self.due:
            return
        self.due = False
        read_utc = datetime.now(UTC).isoformat(timespec="seconds")
        entries, _ = read_file(self.path)
        try:
            write_file(self.path, [*entries, {**self._entry, "read_utc": read_utc}])
        except OSError as error:
            self._say(
                f"the acknowledgement could not be kept in {self.path} ({error}); "
                "it will be asked for again"
            )

    def _say(self, text: str) -> None:
        self.remark = f"Cautions: {text}"
        log.warning("%s", self.remark)


def demand(acknowledgement: Acknowledgement) -> None:
    """RefusedError where the cautions have not been acknowledged."""
    if acknowledgement.due:
        raise RefusedError(
            "arming this tracer for the first time with this profile",
            found="the cautions not acknowledged"
            + (f" ({acknowledgement.remark})" if acknowledgement.remark else ""),
            expected="that the operator has read them, once",
            next_step="read them in README.md, or run `kneewise sweep` at a terminal; then "
            "Tracer.open(..., cautions_read=True) or --cautions-read",
        )
