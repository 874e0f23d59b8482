"""One sweep of a device under test, recorded frame by frame.

The one place of these checkers that fires. What is to arrive in the charge is sent behind the
fire in one piece: an emulated device charges in no time.
"""

from __future__ import annotations

from dataclasses import dataclass

from conformance.bench import Bench, guarded
from conformance.report import Broken, Unseen, Verdict
from conformance.wire import ANSWER_S, Frame
from kneewire import catalogue, framing
from kneewire.messages import Message, pack

BEAT_S = 0.4
BLEED_S = 60.0
STATUS_SEQUENCE = 0x57A70001
BEAT_SEQUENCE = 0x57A70002
# Of the short sweep. More pairs than one burst holds, and fewer than there are.
SHORT_PAIRS = 2000
RAW_FROM = 10
RAW_PAIRS = 1500


@dataclass(frozen=True, slots=True)
class Sweep:
    """What was sent, and all that came from the fire on."""

    sweep_id: bytes
    token: int
    quiet_ms: int
    ended_s: float
    """From the fire to charge_ended, by the port's clock."""
    frames: tuple[Frame, ...]
    before: Message
    in_bleeding: Message
    """Status right behind charge_ended, and behind a hello there."""
    after: Message
    manifest: Message
    again: Message
    """The manifest once more, where asked for after the same fire was sent again."""

    def place(self, name: str, sequence: int | None = None) -> int:
        """Where the first frame of that name stands."""
        for number, frame in enumerate(self.frames):
            if frame.name == name and sequence in (None, frame.sequence):
                return number
        raise Broken(f"no {name}")

    def only(self, name: str) -> Message:
        those = [frame for frame in self.frames if frame.name == name]
        if len(those) != 1:
            raise Broken(f"{len(those)} times {name}")
        return those[0].reply(name)

    @property
    def end_reason(self) -> str:
        number = self.manifest["end_reason"]
        return catalogue.END_REASONS.get(number, str(number))

    @property
    def closed_s(self) -> float:
        """From the first pair to the contact open."""
        return float(self.manifest["opened_us"] - self.manifest["conducting_us"]) / 1e6


def sweep(
    bench: Bench,
    behind: bytes = b"",
    *,
    beats: bool = True,
    repeat: bool = False,
    arming: dict[str, int] | None = None,
) -> Sweep:
    """Arm, fire with `behind` in the same write, wait for the end of the bleed.

    `repeat` sends the same fire once more when all is over; `arming` holds other values for the
    arm. The device holds the sweep afterwards. NotTried where it may not or does not arm.
    """
    before = bench.status()
    armed = bench.arm(**(arming or {}))
    values = bench.fire_values(armed["token"])
    fire = bench.frame("fire", values)
    start, fired_s = len(bench.heard), bench.port.clock()
    bench.port.write(fire + behind)
    quiet_ms = bench.await_frame("fire_reply", start, ANSWER_S)["quiet_ms"]
    ended_s = await_end(bench, start, quiet_ms / 1000 + ANSWER_S, beats=beats) - fired_s
    bench.hello()
    in_bleeding = bench.status()
    bench.await_frame("bleed_ended", start, BLEED_S)
    bench.exchange(b"", bench.session)
    after = bench.status()
    manifest = bench.ask("read_manifest").reply("manifest")
    again = manifest
    if repeat:
        bench.exchange(fire, bench.session, seconds=quiet_ms / 1000)
        again = bench.ask("read_manifest").reply("manifest")
    return Sweep(
        values["sweep_id"],
        armed["token"],
        quiet_ms,
        ended_s,
        tuple(bench.heard[start:]),
        before,
        in_bleeding,
        after,
        manifest,
        again,
    )


def await_end(bench: Bench, start: int, seconds: float, *, beats: bool) -> float:
    """When charge_ended came; a heartbeat twice a second meanwhile. Broken where it does not."""
    end = bench.port.clock() + seconds
    while True:
        try:
            bench.await_frame("charge_ended", start, BEAT_S)
            return bench.port.clock()
        except Broken:
            if bench.port.clock() >= end:
                raise
        if beats:
            bench.port.write(guarded(bench.heartbeat(bench.session)[1]))


def whole(bench: Bench) -> Sweep:
    """A sweep to its own end, with requests right behind the fire.

    Made once; several checks look at it. It stays held until one of them arms again.
    """
    return _once(bench, "whole", requests(bench))


def disturbed(bench: Bench) -> Sweep:
    """A sweep with what is no abort behind the fire, and the same fire again at its end."""
    return _once(bench, "disturbed", no_aborts(bench), repeat=True)


def aborted(bench: Bench) -> Sweep:
    """A sweep with the abort of its session right behind the fire."""
    return _once(bench, "aborted", bench.abort_frame())


def short(bench: Bench) -> Sweep:
    """A sweep that its time ends early, of which most pairs are raw ones as well."""
    values = {"raw_from_us": RAW_FROM * pair_us(bench), "raw_pairs": RAW_PAIRS}
    limit_ms = SHORT_PAIRS * pair_us(bench) // 1000
    return _once(bench, "short", arming={"closed_limit_ms": limit_ms, **values})


def pair_us(bench: Bench) -> int:
    """From one pair to the next, as the profile says."""
    if not bench.profile:
        raise Unseen("the device holds no profile")
    return int(bench.profile["pair_us"])


def _once(
    bench: Bench,
    name: str,
    behind: bytes = b"",
    *,
    repeat: bool = False,
    arming: dict[str, int] | None = None,
) -> Sweep:
    if name not in bench.made:
        try:
            bench.made[name] = sweep(bench, behind, repeat=repeat, arming=arming)
        except Verdict as why:
            bench.made[name] = why
    made = bench.made[name]
    if isinstance(made, Sweep):
        return made
    raise made


def no_aborts(bench: Bench) -> bytes:
    """The abort of another session, and this session's own without a delimiter before it."""
    foreign = framing.GUARD + framing.encode(pack("abort", bench.session ^ 1, 0), True)
    return foreign + b"~" + framing.encode(pack("abort", bench.session, 0), True)


def requests(bench: Bench) -> bytes:
    status = bench.frame("status", sequence=STATUS_SEQUENCE)
    return status + bench.frame("heartbeat", sequence=BEAT_SEQUENCE)
