"""What a tracer keeps over power cycles: its contact's wear, and its last proof test."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta

from kneewire.messages import Message

EPOCH = date(1970, 1, 1)


@dataclass(frozen=True, slots=True)
class Logbook:
    """As the device tells it."""

    operations: int
    """Closings of the contact since it was new."""
    hot_openings: int
    """Openings under load."""
    proven: date | None
    """Day (UTC) of the last proof test, None for never."""
    proof_digest: str
    """First half of its report's SHA-256, as hex."""
    begun_anew: bool = False
    """True where an earlier logbook was lost: the counts are not those of the contact's life."""

    def proof_age_days(self, today: date | None = None) -> int | None:
        """Days since the last proof test; None where there was none."""
        if self.proven is None:
            return None
        return ((today or datetime.now(UTC).date()) - self.proven).days


def logbook_of(message: Message) -> Logbook:
    """From the device's reply."""
    day = message["proof_day"]
    return Logbook(
        operations=message["operations"],
        hot_openings=message["hot_openings"],
        proven=EPOCH + timedelta(days=day) if day else None,
        proof_digest=message["proof_digest"].hex(),
        begun_anew=bool(message["begun_anew"]),
    )


def proof_due(book: Logbook, proof_days: int, today: date) -> str:
    """Why a proof test is due on that day (UTC), or ""."""
    age_days = book.proof_age_days(today)
    if age_days is None:
        return "This tracer's guards were never proven: run `kneewise prove`."
    if age_days < 0:
        return (
            f"The last proof test is of {book.proven}, a day to come: check this computer's clock, "
            "then run `kneewise prove`."
        )
    if age_days > proof_days:
        return (
            f"The last proof test was {age_days} days ago ({book.proven}); the profile asks for "
            f"one every {proof_days} days: run `kneewise prove`."
        )
    return ""
