"""The public face of a tracer: open it, sweep, read its state.

Comes in: a target's name, settings. Goes out: traces. It speaks in messages through a session
and knows no bytes.
"""

from __future__ import annotations

import logging
import secrets
from collections.abc import Callable
from datetime import timedelta
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
from kneewise.instrument.assemble import assemble
from kneewise.instrument.opened import Opened, open_target
from kneewise.instrument.profile import read_record
from kneewise.instrument.status import Status, fault_of, status_of
from kneewise.instrument.sweep import Reassembly, fetch
from kneewise.instrument.trace import Trace, label_of
from kneewise.link.clock import Probe, estimate
from kneewise.link.frames import FrameLog
from kneewise.link.port import Port
from kneewise.link.recording import Recorder
from kneewise.link.refusals import CODES
from kneewise.link.session import Session

log = logging.getLogger(__name__)
log.addHandler(logging.NullHandler())

CLOCK_PROBES = 4
PROBE_TRIES = 40
BLEED_S = 60.0
FAULT_BLEED_S = 5.0
SAFE_TO_SHOW_V = 1.0  # in a fault, readings are waited for down to here
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
        keep: Keep | None = None,
        progress: Callable[[str], None] = lambda stage: None,
    ) -> Trace:
        """One sweep: arm, fire, capture, bleed, fetch.

        `knots`: 16 to 512 points. `limit_s`: longest time the contact may be closed.
        `keep` is given the trace before the device is told that it may forget it; what it
        raises leaves the sweep held. `progress` is told each stage.

        Raises RefusedError, DeviceFaultError, LinkError, OutcomeUnknownError, TrustError.
        """
        try:
            return self._sweep(knots, limit_s, keep, progress)
        except KeyboardInterrupt:
            self._session.abort()
            raise

    def _sweep(
        self, knots: int, limit_s: float, keep: Keep | None, progress: Callable[[str], None]
    ) -> Trace:
        progress("getting ready")
        self._wait_safe()
        sweep_id = secrets.token_bytes(16)
        values = {
            "knots": knots,
            "closed_limit_ms": round(limit_s * 1000),
            "confirmed": 1 if self.source_stands_alone else 0,
        }
        for left in reversed(range(ARMINGS)):
            progress("arming")
            token = self._session.request("arm", values)["token"]
            try:
                self._fire(token, sweep_id, progress)
                break
            except RefusedError as error:
                # Refused means not fired, for good: on a bad link the token has died on its way.
                if not left or error.code not in (CODES["bad token"], CODES["wrong state"]):
                    raise
        progress("bleeding")
        trace = self._after_fire(sweep_id, lambda: self._finish(sweep_id, progress))
        self._hand_over(trace, sweep_id, keep)
        return trace

    def held(self, *, keep: Keep | None = None) -> Trace | None:
        """Fetch a finished sweep that the device still holds, or None; see `sweep` for `keep`."""
        # A latched fault is no reason to lose what was measured before it.
        status, _ = self._wait_bled()
        if not status.held_sweep:
            return None
        sweep_id = bytes.fromhex(status.held_sweep)
        trace = self._rejoining(lambda: self._finish(sweep_id, lambda stage: None))
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

    def _finish(self, sweep_id: bytes, progress: Callable[[str], None]) -> Trace:
        """Wait for the bleed, fetch the held sweep, make the trace."""
        fault = self._await_bleed(sweep_id)
        progress("fetching")
        manifest = self._manifest(sweep_id, fault)
        reassembly = fetch(self._session, manifest)
        probes = self._probes()
        try:
            return self._trace(manifest, reassembly, probes)
        except TrustError as error:
            # Not a curve: held on, it would only stand in the way of the next sweep.
            self._session.request("acknowledge", {"sweep_id": sweep_id})
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
        _, fault = self._wait_bled()
        return fault

    def _trace(self, manifest: Message, reassembly: Reassembly, probes: list[Probe]) -> Trace:
        started, uncertainty_s = self._utc(manifest["conducting_us"], probes)
        return assemble(
            manifest,
            reassembly,
            rung=self.rung,
            device=self.device,
            profile=self.profile,
            frames_bad=self._session.frames_bad,
            started_utc=started,
            started_uncertainty_s=uncertainty_s,
            scenario=self._opened.scenario,
            truth=self._opened.truth,
        )

    def _hand_over(self, trace: Trace, sweep_id: bytes, keep: Keep | None) -> None:
        if keep is not None:
            keep(trace)
        self._rejoining(lambda: self._session.request("acknowledge", {"sweep_id": sweep_id}))

    # -- waiting and clocks ------------------------------------------------------------

    def _wait_safe(self) -> Status:
        """Wait out the bleed; a latched fault is raised."""
        status, fault = self._wait_bled()
        if fault is not None:
            raise fault
        if status.state == "armed":
            self._session.abort()
        return status

    def _wait_bled(self) -> tuple[Status, DeviceFaultError | None]:
        port = self._session.port
        start = port.clock()
        end = start + BLEED_S
        while True:
            message = self._session.request("status")
            status = status_of(message, self.profile)
            if status.state == "fault":
                fault = fault_of(message)
                # The bleed works in a fault as well, unless the contact has welded.
                falling = status.bleed_engaged and status.capacitor_v > SAFE_TO_SHOW_V
                if not falling or port.clock() >= start + FAULT_BLEED_S:
                    return status, fault
                port.sleep(0.02)
                continue
            if status.state not in ("bleeding", "charging"):
                return status, None
            if port.clock() >= end:
                raise DeviceFaultError(
                    "waiting for the bleed",
                    found=f"{status.capacitor_v:.1f} V on the capacitor after {BLEED_S:g} s",
                    expected="an empty capacitor",
                    next_step="keep away from the terminals; check the bleed resistor",
                    guard=1,
                )
            port.sleep(0.02)

    def _probes(self) -> list[Probe]:
        """Clock probes. One that was sent twice says nothing: which of the two was answered?"""
        clock = self._session.port.clock
        counters = self._session.frames.counters
        found: list[Probe] = []
        for _ in range(PROBE_TRIES):
            sent, again = clock(), counters.sent_again
            reply = self._session.request("heartbeat")
            if counters.sent_again == again:
                received, replied = reply["received_us"] / 1e6, reply["replied_us"] / 1e6
                found.append(Probe(sent, received, replied, clock()))
            if len(found) == CLOCK_PROBES:
                return found
        if not found:
            raise LinkError(
                f"setting the clock by {self._session.port.name}",
                found=f"no answer at the first asking in {PROBE_TRIES} tries "
                f"({self._session.frames.summary()})",
                expected="one at the least",
                next_step="use a shorter or better cable; the sweep is still held",
            )
        return found

    def _utc(self, device_us: int, probes: list[Probe]) -> tuple[str, float]:
        offset = estimate(probes)
        now = self._opened.utc()
        ago_s = self._session.port.clock() + offset.offset_s - device_us / 1e6
        try:
            started = now - timedelta(seconds=ago_s)
        except OverflowError:
            raise TrustError(
                f"setting the clock by {self._session.port.name}",
                found=f"a sweep {ago_s:g} s ago",
                expected="times since the device's boot",
                next_step="use firmware and host of the same version; then sweep again",
            ) from None
        return started.isoformat(), offset.uncertainty_s
