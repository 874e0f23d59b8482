"""Playing the scripts to a host: over a pseudo-terminal, or within one process.

Comes in: scripts, and a host that opens a port, sweeps once and closes it. Goes out: results,
those of each script and those of the rules over all scripts together.
"""

from __future__ import annotations

import os
import select
import sys
import time
from collections.abc import Callable, Sequence

from conformance.host_answers import ScriptedDevice
from conformance.host_rules import RULES, Seen
from conformance.host_scripts import Script
from conformance.host_watch import CLOSED, OPENED, Heard
from conformance.report import FAILED, NOT_TRIED, PASSED, UNSEEN, Result, Unseen

AWAY_S = 2.0  # a host that comes back sooner is still in the same script
POLL_S = 0.02
READ_BYTES = 4096


class Play:
    """One script under way. `over` once its host has come, spoken and gone."""

    def __init__(self, script: Script) -> None:
        self.script = script
        self.device = ScriptedDevice(script.twist())

    @property
    def spoken(self) -> bool:
        return any(isinstance(entry, Heard) for entry in self.device.watch.log)

    def result(self) -> Result:
        """What came of the script."""
        script = self.script
        if not self.spoken:
            outcome, found = NOT_TRIED, "no host has spoken"
        else:
            try:
                found = script.judge(self.device.watch.log, self.device)
                outcome = FAILED if found else PASSED
            except Unseen as why:
                outcome, found = why.outcome, why.found
        return Result(script.name, script.clauses, outcome, script.expected, found or "as expected")


class Loopback:
    """The port of a host in the same process; its clock stands still but for waits."""

    name = "scripted device"

    def __init__(self, device: ScriptedDevice) -> None:
        self._device = device
        self._now_s = device.now_s
        device.note(OPENED, self._now_s)

    def clock(self) -> float:
        return self._now_s

    def sleep(self, seconds: float) -> None:
        self._now_s += seconds

    def read(self, timeout_s: float) -> bytes:
        end = self._now_s + timeout_s
        while True:
            data = self._device.take(self._now_s)
            if data or self._now_s >= end:
                return data
            due = self._device.due()
            self._now_s = end if due is None else min(max(due, self._now_s), end)

    def write(self, data: bytes) -> None:
        self._device.hear(data, self._now_s)

    def close(self) -> None:
        self._device.note(CLOSED, self._now_s)


def results(plays: Sequence[Play]) -> list[Result]:
    """One result a script, then one a rule over all of them."""
    found = [play.result() for play in plays]
    for rule in RULES:
        occasions, broken = 0, []
        for play in plays:
            seen = Seen()
            rule.look(play.device.watch.log, seen)
            occasions += seen.occasions
            if seen.broken:
                broken.append(f"{play.script.name}: {seen.broken[0]}")
        if broken:
            outcome, text = FAILED, "; ".join(broken)
        elif occasions:
            outcome, text = PASSED, f"{occasions} times"
        else:
            outcome, text = UNSEEN, "no occasion for it"
        found.append(Result(rule.name, rule.clauses, outcome, rule.expected, text))
    return found


def play_over_pty(scripts: Sequence[Script], say: Callable[[str], object]) -> list[Result]:
    """Serve a pseudo-terminal, one script after another; `say` is told its name and each script.

    A script is over when its host has spoken and been away for AWAY_S.
    """
    import pty
    import tty

    ours, theirs = pty.openpty()
    tty.setraw(theirs)
    name = os.ttyname(theirs)
    os.close(theirs)
    plays = []
    try:
        say(f"the scripted device is {name}: let the host sweep there, once for each script")
        for number, script in enumerate(scripts, start=1):
            say(
                f"script {number} of {len(scripts)}: {script.name}; its user should see "
                f"{script.seen}"
            )
            plays.append(_serve(Play(script), ours))
    finally:
        os.close(ours)
    say("no more scripts")
    return results(plays)


def _serve(play: Play, ours: int) -> Play:
    device = play.device
    there = False
    left_s = 0.0
    while True:
        now_s = time.monotonic()
        if _host_is_there(ours) != there:
            there = not there
            device.note(OPENED if there else CLOSED, now_s)
            left_s = now_s
        if not there:
            if play.spoken and now_s - left_s > AWAY_S:
                return play
            time.sleep(POLL_S)
            continue
        try:
            due = device.due()
            wait_s = POLL_S if due is None else min(max(due - now_s, 0.0), POLL_S)
            readable, _, _ = select.select([ours], [], [], wait_s)
            if readable:
                device.hear(os.read(ours, READ_BYTES), time.monotonic())
            data = device.take(time.monotonic())
            while data:
                data = data[os.write(ours, data) :]
        except OSError:
            time.sleep(POLL_S)  # the host closed it between the look and the move


def _host_is_there(ours: int) -> bool:
    poll = select.poll()
    poll.register(ours, select.POLLIN)
    return not any(event & select.POLLHUP for _, event in poll.poll(0))


def ptys_exist() -> bool:
    return sys.platform != "win32"
