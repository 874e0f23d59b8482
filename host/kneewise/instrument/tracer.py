"""The public face of a tracer: open it, sweep, read its state.

Comes in: a target's name, settings. Goes out: traces. It speaks in messages through a session
and knows no bytes.
"""

from __future__ import annotations

import logging
import secrets
from collections.abc import Callable
from pathlib import Path
from types import TracebackType
from typing import Self, TypeVar

from kneewire import catalogue
from kneewire.messages import Message
from kneewise.errors import (
    DeviceFaultError,
    LinkError,
    OutcomeUnknownError,
    RefusedError,
    TrustError,
)
from kneewise.instrument.arming import arm
from kneewise.instrument.assemble import assemble
from kneewise.instrument.bled import wait_bled
from kneewise.instrument.full_rate import NO_WINDOW, FullRate, Window
from kneewise.instrument.opened import Opened, open_target
from kneewise.instrument.profile import read_record
from kneewise.instrument.scout import (
    SCOUT_KNOTS,
    maximum_s,
    steered_limit_s,
    unusable,
    with_scout,
)
from kneewise.instrument.status import Status, status_of
from kneewise.instrument.sweep import fetch, fetch_raw
from kneewise.instrument.timing import probes_of, utc_of
from kneewise.instrument.trace import Trace, label_of
from kneewise.link.frames import FrameLog
from kneewise.link.port import Port
from kneewise.link.recording import Recorder
from kneewise.link.refusals import CODES
from kneewise.link.session import Session

log = logging.getLogger(__name__)
log.addHandler(logging.NullHandler())

REJOIN_S = 20.0
NOTICE_S = 5.0
MANIFEST_S = 10.0
ARMINGS = 3
SETTLE_S = 0.25

T = TypeVar("T")
Keep = Callable[[Trace], object]


class Tracer:
    """One tracer, real or emulated. Open it with `Tracer.open`, close it or use `with`."""

    def __init__(
        self,
        opened: Opened,
        *,
        source_stands_alone: bool = False,
        recorder: Recorder | None = None,
    ) -> None:
        self._opened = opened
        self.remark = opened.remark
        self.recorder = recorder
        self._closed = False
        try:
            self._session = Session(self._connect())
        except BaseException:
            opened.close()
            raise
        self.frames: FrameLog = self._session.frames
        """What went over the link lately."""
        try:
            self.device = self._session.hello()
            record = self._session.request("read_profile")["record"]
            self.profile = read_record(record) if record else {}
        except BaseException:
            self.close()
            raise
        self.source_stands_alone = source_stands_alone or self.emulated

    @classmethod
    def open(
        cls, target: str, *, source_stands_alone: bool = False, record: Path | str | None = None
    ) -> Self:
        """Open "/dev/ttyACM0", "COM5", "usb:SERIAL", "tcp:host:port", "emulator", "replay:FILE"
        and the like.

        `source_stands_alone`: the operator confirms that nothing else (battery, inverter,
        parallel strings) feeds the source's terminals; without it a real tracer refuses.
        `record`: a new file for all that goes over the link, for `replay:FILE`.
        Raises UsageError, LinkError, ProtocolError.
        """
        found = open_target(target)
        recorder = None if record is None else Recorder(record, target)
        return cls(found, source_stands_alone=source_stands_alone, recorder=recorder)

    def _connect(self) -> Port:
        port = self._opened.connect()
        return port if self.recorder is None else self.recorder.wrap(port)

    @property
    def emulated(self) -> bool:
        """True where the device says that it is an emulated one."""
        return bool(self.device["flags"] & catalogue.FLAG_EMULATED)

    @property
    def rung(self) -> str:
        """What runs the firmware; see `Trace.rung`."""
        if self._opened.rung == "tracer" and self.emulated:
            return "emulator"
        return self._opened.rung

    @property
    def label(self) -> str:
        """What stands on the face of all that comes from here; see `Trace.label`."""
        return label_of(self.emulated, self.rung)

    def close(self) -> None:
        """Close the port; twice is harmless."""
        if not self._closed:
            self._closed = True
            self._session.port.close()
            self._opened.close()
            if self.recorder is not None:
                self.recorder.close()

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
        return status_of(self._session.request("status"), self.profile)

    def listen(self, seconds: float) -> None:
        """Hear what comes unasked for so long: frames and text go to `frames`."""
        self._session.wait_notice("", seconds)

    def rest(self) -> Status:
        """Stop whatever is under way, wait until the capacitor is bled; the state then.

        DeviceFaultError where a fault is latched.
        """
        self._session.abort()
        return self._wait_safe()

    def clear_fault(self) -> None:
        """Clear a latched fault; what is still wrong will latch again."""
        self._session.request("clear_fault")

    # -- sweeps ------------------------------------------------------------------------

    def sweep(
        self,
        *,
        knots: int = 96,
        limit_s: float = 10.0,
        full_rate: FullRate | None = None,
        scout: bool = False,
        keep: Keep | None = None,
        progress: Callable[[str], None] = lambda stage: None,
    ) -> Trace:
        """One sweep: arm, fire, capture, bleed, fetch.

        `knots`: 16 to 512 points. `limit_s`: longest time the contact may be closed.
        `full_rate`: a stretch whose raw pairs are kept, in `Trace.full_rate`. `scout`:
        sweep twice, coarsely first; the scout steers where the pairs of the other are kept (about
        its maximum power, where `full_rate` names no start) and how long its contact may be
        closed, a check compares the two, and the scout is in `Trace.scout`.
        `keep` is given the trace before the device is told that it may forget it; what it
        raises leaves the sweep held. `progress` is told each stage.

        Raises UsageError, RefusedError, DeviceFaultError, LinkError, OutcomeUnknownError,
        TrustError; with a scout that is not sound the last, after `keep` was given the scout.
        """
        if full_rate is not None:
            full_rate.check(self.profile, limit_s)
            scout = scout or full_rate.start_s is None
        try:
            if scout:
                return self._scouted(knots, limit_s, full_rate or FullRate(), keep, progress)
            window = NO_WINDOW if full_rate is None else full_rate.window(self.profile)
            return self._sweep(knots, limit_s, window, keep, progress)
        except KeyboardInterrupt:
            self._session.abort()
            raise

    def _scouted(
        self,
        knots: int,
        limit_s: float,
        full_rate: FullRate,
        keep: Keep | None,
        progress: Callable[[str], None],
    ) -> Trace:
        """A scout sweep, and the one that it steers."""

        def keep_unusable(trace: Trace) -> None:
            if keep is not None and unusable(trace) is not None:
                keep(trace)

        scout = self._sweep(
            SCOUT_KNOTS,
            limit_s,
            NO_WINDOW,
            keep_unusable,
            lambda stage: progress(f"scout: {stage}"),
        )
        error = unusable(scout)
        if error is not None:
            raise error
        window = full_rate.window(self.profile, maximum_s(scout))
        limit_s = steered_limit_s(scout, limit_s, self.profile)
        return self._sweep(knots, limit_s, window, keep, progress, scout)

    def _sweep(
        self,
        knots: int,
        limit_s: float,
        window: Window,
        keep: Keep | None,
        progress: Callable[[str], None],
        scout: Trace | None = None,
    ) -> Trace:
        progress("getting ready")
        self._wait_safe()
        sweep_id = secrets.token_bytes(16)
        for left in reversed(range(ARMINGS)):
            progress("arming")
            token, window = arm(self._session, knots, limit_s, window, self.source_stands_alone)
            try:
                self._fire(token, sweep_id, progress)
                break
            except RefusedError as error:
                # Refused means not fired, for good: on a bad link the token has died on its way.
                if not left or error.code not in (CODES["bad token"], CODES["wrong state"]):
                    raise
        progress("bleeding")
        trace = self._after_fire(sweep_id, lambda: self._finish(sweep_id, progress, window.pairs))
        if scout is not None:
            trace = with_scout(trace, scout)
        self._hand_over(trace, sweep_id, keep)
        return trace

    def held(self, *, keep: Keep | None = None) -> Trace | None:
        """Fetch a finished sweep that the device still holds, or None; see `sweep` for `keep`."""
        # A latched fault is no reason to lose what was measured before it.
        status, _ = wait_bled(self._session, self.profile)
        if not status.held_sweep:
            return None
        sweep_id = bytes.fromhex(status.held_sweep)
        trace = self._rejoining(lambda: self._finish(sweep_id, lambda stage: None, None))
        self._hand_over(trace, sweep_id, keep)
        return trace

    def _fire(self, token: int, sweep_id: bytes, progress: Callable[[str], None]) -> None:
        """Fire, and wait in quiet until the charge has ended. Never fires a second time."""
        session = self._session
        progress("charging")

        def go() -> None:
            fired = session.request("fire", {"token": token, "sweep_id": sweep_id})
            session.wait_quiet(fired["quiet_ms"] / 1000, sweep_id)

        # The charge may be under way when the link goes: whatever happened, the device knows.
        self._after_fire(sweep_id, go, lambda: None)

    def _after_fire(
        self, sweep_id: bytes, action: Callable[[], T], again: Callable[[], T] | None = None
    ) -> T:
        """`action`; after a lost link `again`, or `action` once more, if the device is the same."""
        boot_nonce = self.device["boot_nonce"]
        try:
            return action()
        except (LinkError, RefusedError) as error:
            # A device that was reset over an unbroken link knows no session.
            if isinstance(error, RefusedError) and error.code != CODES["unknown session"]:
                raise
        self._rejoin()
        self._same_sweep(boot_nonce, sweep_id)
        return (again or action)()

    def _same_sweep(self, boot_nonce: int, sweep_id: bytes) -> None:
        """OutcomeUnknownError where the device was reset, or does not know of the sweep."""
        if self.device["boot_nonce"] != boot_nonce:
            cause = catalogue.RESET_CAUSES.get(self.device["reset_cause"], "unknown")
            raise OutcomeUnknownError(
                f"sweep {sweep_id.hex()[:8]}",
                found=f"the device was reset after it was told to fire (cause: {cause})",
                expected="the device that was told to fire",
                next_step="the sweep is lost or was never made; measure the capacitor, "
                "find the cause, then sweep again",
            )
        status = self.status()
        if status.state != "charging" and status.held_sweep != sweep_id.hex():
            self._session.abort()
            raise OutcomeUnknownError(
                f"sweep {sweep_id.hex()[:8]}",
                found="the device holds no such sweep: the fire did not arrive, or the firmware "
                "failed in the charge" + self._crash(),
                expected="a held sweep",
                next_step="measure the capacitor, then sweep again",
            )

    def _crash(self) -> str:
        tracebacks = self._session.tracebacks
        return f" ({tracebacks[-1].splitlines()[-1]})" if tracebacks else ""

    def _rejoining(self, action: Callable[[], T]) -> T:
        try:
            return action()
        except LinkError:
            self._rejoin()
            return action()

    def _rejoin(self) -> None:
        """Open the port again and resume the session, for REJOIN_S at most."""
        port = self._session.port
        end = port.clock() + REJOIN_S
        port.close()
        while True:
            try:
                self._session.take_over(self._connect())
                self.device = self._session.hello()
                return
            except LinkError:
                if port.clock() >= end:
                    raise
                self._session.port.close()
                port.sleep(SETTLE_S)

    def _finish(self, sweep_id: bytes, progress: Callable[[str], None], asked: int | None) -> Trace:
        """Wait for the bleed, fetch the held sweep, make the trace.

        `asked`: raw pairs that were to be kept; None where that is not known.
        """
        fault = self._await_bleed(sweep_id)
        progress("fetching")
        session = self._session
        manifest = self._manifest(sweep_id, fault)
        reassembly = fetch(session, manifest)
        pairs = fetch_raw(session, manifest)
        probes = probes_of(session)
        try:
            started, uncertainty_s = utc_of(
                manifest["conducting_us"], probes, session, self._opened.utc()
            )
            return assemble(
                manifest,
                reassembly,
                pairs,
                asked=asked,
                rung=self.rung,
                device=self.device,
                profile=self.profile,
                frames_bad=session.frames_bad,
                started_utc=started,
                started_uncertainty_s=uncertainty_s,
                scenario=self._opened.scenario,
                truth=self._opened.truth,
            )
        except TrustError as error:
            # Not a curve: held on, it would only stand in the way of the next sweep.
            session.request("acknowledge", {"sweep_id": sweep_id})
            raise (fault or error) from None

    def _manifest(self, sweep_id: bytes, fault: DeviceFaultError | None) -> Message:
        try:
            manifest = self._session.request("read_manifest", deadline_s=MANIFEST_S)
            held = manifest["sweep_id"]
        except RefusedError as error:
            if error.code != CODES["no held sweep"]:
                raise
            held = b""
        if held == sweep_id:
            return manifest
        if fault is not None:
            raise fault
        raise TrustError(
            f"sweep {sweep_id.hex()[:8]}",
            found=f"the device holds {held.hex() or 'no sweep'}",
            expected="this sweep",
            next_step="sweep again; another program may be talking to the tracer",
        )

    def _await_bleed(self, sweep_id: bytes) -> DeviceFaultError | None:
        """Until the bleed after a charge has ended, by its notice; a fault that is latched."""
        notice = self._session.wait_notice("bleed_ended", NOTICE_S, sweep_id)
        if notice is not None and catalogue.STATES.get(notice["state"]) != "fault":
            return None
        _, fault = wait_bled(self._session, self.profile)
        return fault

    def _hand_over(self, trace: Trace, sweep_id: bytes, keep: Keep | None) -> None:
        if keep is not None:
            keep(trace)
        self._rejoining(lambda: self._session.request("acknowledge", {"sweep_id": sweep_id}))

    def _wait_safe(self) -> Status:
        """Wait out the bleed; a latched fault is raised."""
        status, fault = wait_bled(self._session, self.profile)
        if fault is not None:
            raise fault
        if status.state == "armed":
            self._session.abort()
        return status
