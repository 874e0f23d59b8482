"""The public face of a tracer: open it, sweep, read its state.

Comes in: a target's name, settings. Goes out: traces. It speaks in messages through a session
and knows no bytes. How the link is kept is `connection.py`'s business, how a sweep goes over it
that of `sweeping.py`.
"""

from __future__ import annotations

import logging
from dataclasses import replace
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from kneewire import catalogue
from kneewise.instrument.arming import Asked
from kneewise.instrument.cautions import Acknowledgement, demand
from kneewise.instrument.connection import Connection, Progress
from kneewise.instrument.full_rate import NO_WINDOW, FullRate
from kneewise.instrument.logbook import Logbook, logbook_of, proof_due
from kneewise.instrument.opened import Opened, open_target
from kneewise.instrument.scout import (
    SCOUT_KNOTS,
    maximum_s,
    steered_limit_s,
    unusable,
)
from kneewise.instrument.status import Status
from kneewise.instrument.sweeping import Keep, Sweeping
from kneewise.instrument.trace import REPLAY, Trace, label_of
from kneewise.link.frames import FrameLog
from kneewise.link.recording import Recorder
from kneewise.link.session import Session

log = logging.getLogger(__name__)
log.addHandler(logging.NullHandler())


class Tracer:
    """One tracer, real or emulated. Open it with `Tracer.open`, close it or use `with`."""

    def __init__(
        self,
        opened: Opened,
        *,
        source_stands_alone: bool = False,
        cautions_read: bool = False,
        recorder: Recorder | None = None,
    ) -> None:
        self.remark = opened.remark
        self.recorder = recorder
        self.connection = Connection(opened, recorder)
        """Requests one by one, for the workshop."""
        self.frames: FrameLog = self._session.frames
        """What went over the link lately."""
        self.source_stands_alone = source_stands_alone or self.emulated
        self.cautions = Acknowledgement(
            self.device["device_id"].hex(), self.device["profile_crc"], wanted=not self.label
        )
        """Whether the cautions have been read; see `instrument.cautions`."""
        self._proof_told = False
        self._sweeping = Sweeping(self.connection, self.rung)
        if cautions_read:
            self.cautions.give()

    @classmethod
    def open(
        cls,
        target: str,
        *,
        source_stands_alone: bool = False,
        cautions_read: bool = False,
        record: Path | str | None = None,
    ) -> Self:
        """Open "/dev/ttyACM0", "COM5", "usb:SERIAL", "tcp:host:port", "emulator", "replay:FILE"
        and the like.

        `source_stands_alone`: the operator confirms that nothing else (battery, inverter,
        parallel strings) feeds the source's terminals; without it a real tracer refuses.
        `cautions_read`: so do they that they have read `kneewise.instrument.cautions.CAUTIONS`;
        wanted once for each real tracer and profile.
        `record`: a new file for all that goes over the link, for `replay:FILE`.
        Raises UsageError, LinkError, ProtocolError.
        """
        found = open_target(target)
        recorder = None if record is None else Recorder(record, target)
        return cls(
            found,
            source_stands_alone=source_stands_alone,
            cautions_read=cautions_read,
            recorder=recorder,
        )

    @property
    def device(self) -> dict[str, Any]:
        """The device's hello."""
        return self.connection.device

    @property
    def profile(self) -> dict[str, Any]:
        """The board profile as the device holds it, empty where it has none."""
        return self.connection.profile

    @property
    def _session(self) -> Session:
        return self.connection.session

    @property
    def emulated(self) -> bool:
        """True where the device says that it is an emulated one."""
        return bool(self.device["flags"] & catalogue.FLAG_EMULATED)

    @property
    def rung(self) -> str:
        """What runs the firmware; see `Trace.rung`."""
        rung = self.connection.opened.rung
        return "emulator" if rung == "tracer" and self.emulated else rung

    @property
    def label(self) -> str:
        """What stands on the face of all that comes from here; see `Trace.label`."""
        return label_of(self.emulated, self.rung)

    def close(self) -> None:
        """Close the port; twice is harmless."""
        self.connection.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        self.close()

    # -- state -------------------------------------------------------------------------

    def status(self) -> Status:
        """State and live readings."""
        return self.connection.status()

    def listen(self, seconds: float) -> None:
        """Hear what comes unasked for so long: frames and text go to `frames`."""
        self._session.wait_notice("", seconds)

    def rest(self) -> Status:
        """Stop whatever is under way, wait until the capacitor is bled; the state then.

        DeviceFaultError where a fault is latched.
        """
        self._session.abort()
        return self.connection.wait_safe()

    def clear_fault(self) -> None:
        """Clear a latched fault; what is still wrong will latch again."""
        self._session.request("clear_fault")

    def logbook(self) -> Logbook:
        """What the device keeps over power cycles."""
        return logbook_of(self._session.request("read_logbook"))

    def note_proof(self, day: int, digest: bytes) -> bool:
        """Keep a passed proof test on the device: days since 1970-01-01, and the first 16 bytes
        of its report's SHA-256. True where it is kept over power cycles. RefusedError unless safe.
        """
        return bool(self._session.request("note_proof", {"day": day, "digest": digest})["kept"])

    def proof_due(self) -> str:
        """Why a proof test is due, or "". An emulated tracer that never had one is left alone."""
        if self.rung == REPLAY or not self.profile:
            return ""
        book = self.logbook()
        if self.emulated and book.proven is None:
            return ""
        today = self.connection.opened.utc().date()
        return proof_due(book, self.profile["proof_days"], today)

    # -- sweeps ------------------------------------------------------------------------

    def sweep(
        self,
        *,
        knots: int = 96,
        limit_s: float = 10.0,
        full_rate: FullRate | None = None,
        scout: bool = False,
        keep: Keep | None = None,
        limit_v: float | None = None,
        limit_a: float | None = None,
        progress: Progress = lambda stage: None,
    ) -> Trace:
        """One sweep: arm, fire, capture, bleed, fetch.

        `knots`: 16 to 512 points. `limit_s`: longest time the contact may be closed. `limit_v`,
        `limit_a`: the source must not go above, where that is below the board's ratings.
        `full_rate`: a stretch whose raw pairs are kept, in `Trace.full_rate`. `scout`:
        sweep twice, coarsely first; the scout steers where the pairs of the other are kept (about
        its maximum power, where `full_rate` names no start) and how long its contact may be
        closed, a check compares the two, and the scout is in `Trace.scout`.
        `keep` is given the trace before the device is told that it may forget it; what it
        raises leaves the sweep held. `progress` is told each stage.

        Raises UsageError, RefusedError, DeviceFaultError, LinkError, OutcomeUnknownError,
        TrustError; with a scout that is not sound the last, after `keep` was given the scout.
        RefusedError before anything is armed where the cautions of a real tracer were not
        acknowledged; a proof test that is due is told to the log.
        """
        demand(self.cautions)
        self._warn_of_proof()
        asked = Asked(knots=knots, limit_s=limit_s, limit_v=limit_v, limit_a=limit_a)
        if full_rate is not None:
            full_rate.check(self.profile, limit_s)
            scout = scout or full_rate.start_s is None
        try:
            if scout:
                return self._scouted(asked, full_rate or FullRate(), keep, progress)
            window = NO_WINDOW if full_rate is None else full_rate.window(self.profile)
            return self._sweeping.sweep(asked, window, self.source_stands_alone, keep, progress)
        except KeyboardInterrupt:
            self._session.abort()
            raise

    def _warn_of_proof(self) -> None:
        """To the log, once a connection; `proof_due` is there for all who show it themselves."""
        if self._proof_told or self.label:
            return
        self._proof_told = True
        due = self.proof_due()
        if due:
            log.warning("%s", due)

    def _scouted(
        self, asked: Asked, full_rate: FullRate, keep: Keep | None, progress: Progress
    ) -> Trace:
        """A scout sweep, and the one that it steers."""

        def keep_unusable(trace: Trace) -> None:
            if keep is not None and unusable(trace) is not None:
                keep(trace)

        alone = self.source_stands_alone
        scout = self._sweeping.sweep(
            replace(asked, knots=SCOUT_KNOTS),
            NO_WINDOW,
            alone,
            keep_unusable,
            lambda stage: progress(f"scout: {stage}"),
        )
        error = unusable(scout)
        if error is not None:
            raise error
        window = full_rate.window(self.profile, maximum_s(scout))
        asked = replace(asked, limit_s=steered_limit_s(scout, asked.limit_s, self.profile))
        return self._sweeping.sweep(asked, window, alone, keep, progress, scout)

    def held(self, *, keep: Keep | None = None) -> Trace | None:
        """Fetch a finished sweep that the device still holds, or None; see `sweep` for `keep`."""
        return self._sweeping.held(keep)
