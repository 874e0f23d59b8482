"""A million damaged messages and a hundred megabytes of noise, and the contact stays open.

    python -m tests.fuzz.safety [--messages N] [--random-mb M] [--seed S]

Drives the firmware through all its states, with messages mutated before and after coding, with
Ctrl-C and with faults of the board; `oracle.py` says what may close the contact. Fails with the
seed and the latest messages, or prints how often each handler and each refusal was reached.
"""

from __future__ import annotations

import argparse
import time
from collections import deque
from random import Random

from .generator import TOP, Generator
from .tally import Tally
from .world import RING_BYTES, STATES, TRIP_OVER_CURRENT, Done, Rig, counted_handlers

EAR_BYTES = 512  # that the firmware keeps of what it hears while charging
STAY = 100  # messages, before another state is sought
NOISE_BLOCK = 1 << 16
# Turns of noise, after some in which the device is brought to a state.
CYCLE, QUIET_TURNS = 16, 6


class Fuzz:
    """One run over one firmware."""

    def __init__(self, seed: int) -> None:
        self.seed = seed
        self.rng = Random(seed)
        self.rig = Rig()
        self.board = self.rig.board
        self.loop = self.rig.loop
        self.oracle = self.rig.oracle
        self.generator = Generator(self.rng, self.oracle, self.loop)
        self.tally = Tally(self.rig, self.generator)
        self.latest: deque[str] = deque(maxlen=30)
        self._spare = b""
        self._heard_at: int | None = None
        self._wanted = "safe"
        self._stay = 0
        self._goal = 0
        self._noise_left = 0
        self._segments: deque[bytes] = deque()
        self._turns = 0

    def run(self, messages: int, random_bytes: int) -> Tally:
        """All of it, and a hello after each half. What goes wrong tells what led to it."""
        self._goal = messages
        self._noise_left = random_bytes
        with counted_handlers(self.loop.service, self.tally.note_handler):
            try:
                self.board.listening = self._while_charging
                self.rig.serve(self._message_turn)
                self.rig.greet(self.generator.hello(anew=True))
                before = self.oracle.closings
                self.rig.serve(self._noise_turn)
                assert self.oracle.closings == before, "the contact closed on noise"
                self.rig.greet(self.generator.hello(anew=True))
            except BaseException as error:
                error.add_note(f"seed {self.seed}; the latest, oldest first:")
                error.add_note("\n".join(self.latest))
                raise
        return self.tally

    def _say(self, data: bytes) -> None:
        """Bytes from the host; a 0x03 among them strikes once, or twice close together."""
        self.latest.append(f"{self.rig.state():9} {data.hex()}")
        rng = self.rng
        self.board.arrive(data, *(rng.randint(1, 40) for _ in range(rng.choice((1, 1, 2)))))

    # -- messages ----------------------------------------------------------------------------

    def _message_turn(self, ms: int) -> None:
        """The firmware waits for the host."""
        board, rng, oracle = self.board, self.rng, self.oracle
        if self.tally.received.total() >= self._goal:
            raise Done
        if not oracle.reads_all and rng.random() < 0.3:
            board.write_room, oracle.reads_all = None, not self.loop.service._cut
        if self._stay <= 0:
            self._choose()
        state = self.rig.state()
        if state == self._wanted or rng.random() < 0.2:
            self._mutate(state)
            board.pass_us(rng.choice((0, 0, 100, 1000)))
            if state == "armed" and rng.random() < 0.02:
                board.pass_us(2_500_000)  # longer than a token lives
                self._say(self.generator.frame("fire"))
            elif rng.random() < 0.002:
                board.write_room, oracle.reads_all = rng.randrange(60), False
        else:
            self._seek(state)
            board.pass_us(1000 * ms)

    def _choose(self) -> None:
        """The state that has received least, or any."""
        names = list(STATES.values())
        least = min(names, key=lambda name: self.tally.received[name])
        self._wanted = self.rng.choice((least, least, self.rng.choice(names)))
        self._stay = STAY
        self.board.mend()

    def _mutate(self, state: str) -> None:
        while True:
            self._say(self._mutated(state))
            if self.rng.random() > 0.1:
                return

    def _mutated(self, state: str) -> bytes:
        """A mutated message, counted."""
        self._stay -= 1
        self.tally.received[state] += 1
        data, self._spare = self._spare or self.generator.mutated(), b""
        return data

    def _seek(self, state: str) -> None:
        """One step toward the wanted state, by what a host would send."""
        board, rng, generator, oracle = self.board, self.rng, self.generator, self.oracle
        service = self.loop.service
        used_up = service.last_sequence > TOP - 1000
        if oracle.session != service.session or used_up:
            self._say(generator.hello(anew=used_up))
        elif state == "fault":
            board.mend()
            self._say(generator.frame("clear_fault"))
        elif state == "safe":
            if self._wanted == "fault" and rng.random() < 0.1:
                # The capacitor is found charged, and will not empty.
                board.capacitor_v = 30.0
                board.welded, board.bleed_broken = rng.choice(((True, False), (False, True)))
                board.pass_us(150_000)
            elif self.loop.held.present():
                self._say(generator.frame("acknowledge"))
            else:
                self._say(generator.frame("arm"))
                if rng.random() < 0.1:
                    self._wear()
        elif state == "armed":
            if self._wanted == "safe":
                self._say(generator.frame("abort"))
            else:
                self._fire()
        elif self._wanted == "fault":
            board.pass_us(1000 * rng.randrange(100))

    def _wear(self) -> None:
        """Something that a guard must find before closing."""
        board = self.board
        way = self.rng.randrange(4)
        board.loop_closed = way != 0
        board.reversed = way == 1
        board.current_offset_codes = 60 if way == 2 else 0
        board.source_v = 62.0 if way == 3 else 40.0
        board.at(self.rng.randrange(50_000), board.mend)

    # -- charging ----------------------------------------------------------------------------

    def _fire(self) -> None:
        """A good fire, into a charge that may be ended by many things."""
        board, rng = self.board, self.rng
        board.mend()
        way = rng.randrange(4 if self._wanted == "fault" else 100)
        if way == 0:
            board.after_closing(200, lambda: setattr(board, "loop_closed", False))
        elif way == 1:
            board.after_closing(200, lambda: setattr(board, "source_v", 66.0))
        elif way == 2:
            board.after_closing(200, lambda: setattr(board, "seen_trips", TRIP_OVER_CURRENT))
        elif way == 3:
            board.pairs_stop_at = 300
        elif way == 4:
            board.source_v, board.source_a = 1e-4, 0.0
        elif way < 8:
            board.source_a = 0.05  # long enough for a host to be missed
        elif way < 15:
            board.interrupt_after(rng.randrange(60))
        elif way < 18:
            self._wear()
        if self._wanted == "bleeding":
            board.bleed_ohm = 1e5  # for a while
        frame = self.generator.frame("fire")
        if rng.random() < 0.3:
            frame += self._mutated("charging")
        self._say(frame)

    def _while_charging(self) -> None:
        """The firmware listens in mid-charge."""
        board, rng = self.board, self.rng
        if board.source_a == 0:
            # Heard once in a while: a dark source is not to end as a lost host.
            if board.pairs != self._heard_at:
                self._heard_at = board.pairs
                board.incoming += b"\0"
            return
        share = 0.85 if self._wanted == "charging" else 0.1
        # A source that is slow is slow so that the host can be missed.
        while board.source_a > 1 and rng.random() < share:
            if rng.random() < 0.02:
                self._say(b"\0" + self.generator.frame("abort"))
            self._spare = self._spare or self.generator.mutated()
            if board.heard + len(board.incoming) + len(self._spare) > EAR_BYTES:
                break
            self._say(self._mutated("charging"))

    # -- noise -------------------------------------------------------------------------------

    def _noise_turn(self, ms: int) -> None:
        """Uniform random bytes. Each 0x03 among them strikes somewhere in the firmware."""
        board, noise = self.board, self.tally.noise
        self._turns += 1
        if self._turns % CYCLE < QUIET_TURNS:
            self._between_noise(self._turns % CYCLE == 0)
            return
        if not self._segments:
            if self._noise_left <= 0:
                raise Done
            block = self.rng.randbytes(min(NOISE_BLOCK, self._noise_left))
            self._noise_left -= len(block)
            *before, last = block.split(b"\x03")
            self._segments.extend(segment + b"\x03" for segment in before)
            self._segments.append(last)
        segment = self._segments.popleft()
        piece, rest = segment[:RING_BYTES], segment[RING_BYTES:]
        noise[self.rig.state()] += len(piece)
        if rest:
            self._segments.appendleft(rest)
        board.incoming += piece.removesuffix(b"\x03")
        if piece.endswith(b"\x03"):
            # The firmware has had the time to read some of what came before it, or all.
            board.interrupt_after(self.rng.randint(1, 12))

    def _between_noise(self, begins: bool) -> None:
        """One step toward a state in which the next noise is to be heard."""
        board, state, generator = self.board, self.rig.state(), self.generator
        if begins:
            board.calm()
            board.mend()
            self._wanted = self.rng.choice(("safe", "armed", "bleeding", "fault"))
            if self._wanted == "fault":
                board.capacitor_v, board.welded = 30.0, True
        elif self.oracle.session != self.loop.service.session:
            board.arrive(generator.hello(anew=True))
        elif self.loop.held.present():
            board.arrive(generator.frame("acknowledge"))
        elif self._wanted == "armed" and state == "safe":
            board.arrive(generator.frame("arm"))
        elif state == "fault" and self._wanted != "fault":
            board.arrive(generator.frame("clear_fault"))
        if self._wanted == "bleeding":
            board.capacitor_v = 30.0  # until much time passes
        elif state != "armed":
            board.pass_us(2_000_000 if self._wanted == "fault" else 20_000)


def main() -> None:
    words = argparse.ArgumentParser(prog="python -m tests.fuzz.safety")
    words.add_argument("--messages", type=int, default=1_000_000)
    words.add_argument("--random-mb", type=float, default=100)
    words.add_argument("--seed", type=int, default=1)
    given = words.parse_args()
    began = time.perf_counter()
    tally = Fuzz(given.seed).run(given.messages, round(1e6 * given.random_mb))
    print(tally.table())
    print(f"seed {given.seed}, {time.perf_counter() - began:.0f} s")
    if missing := tally.missing():
        raise SystemExit("not reached: " + ", ".join(missing))


if __name__ == "__main__":
    main()
