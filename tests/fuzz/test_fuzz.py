"""If these fail, bytes exist that close the contact, or that stop a device or a host.

The short share of it all; README.md says how the long runs are made, and what came of them.
"""

from __future__ import annotations

import importlib
import subprocess
import sys
from pathlib import Path

import pytest

from .safety import Fuzz
from .targets import CORPUS
from .world import service_module

ROOT = Path(__file__).parents[2]
TARGETS = ["decoder", "service", "replay"]
RUN_S = 5


def test_nothing_closes_the_contact_but_a_valid_arm_and_fire():
    tally = Fuzz(seed=1).run(messages=20_000, random_bytes=2_000_000)
    assert tally.missing() == []


# -- the oracle sees a service that errs -----------------------------------------------------


def takes_any_token(self, request, right):
    self.sequencer.tick()
    self._demand(1)
    self.fired = request["sweep_id"]
    return {"quiet_ms": 500}


def lets_a_wrong_token_pass_by(self, request, right):
    if self.sequencer.state == 1 and request["token"] != self.sequencer.token:
        raise service_module.Refusal(service_module.R_BAD_TOKEN)
    return right(self, request)


def arms_for_too_long(self, request, right):
    values = right(self, request)
    self.sequencer.armed_until_us += 10_000_000
    return values


def fires_by_itself(self, request, right):
    if self.sequencer.state == 1:
        self.fired = bytes(range(16))
    return right(self, request)


def forgets_what_it_has_done(self, request, right):
    self.last_sequence = 0
    return right(self, request)


@pytest.mark.parametrize(
    ("name", "wrong", "seen"),
    [
        ("fire", takes_any_token, "a fire was accepted that is not good"),
        ("fire", lets_a_wrong_token_pass_by, "a fire was accepted that is not good"),
        ("arm", arms_for_too_long, "a fire was accepted that is not good"),
        ("status", fires_by_itself, "closes without a valid arm and fire"),
        ("read_profile", forgets_what_it_has_done, "a repeated or stale request was carried out"),
        ("heartbeat", lambda self, request, right: {}, "received_us"),
    ],
)
def test_a_service_that_errs_is_seen(monkeypatch, name, wrong, seen):
    right = service_module.HANDLERS[name]
    monkeypatch.setitem(
        service_module.HANDLERS, name, lambda self, request: wrong(self, request, right)
    )
    with pytest.raises((AssertionError, KeyError), match=seen):
        Fuzz(seed=2).run(messages=10_000, random_bytes=0)


# -- what fuzzers have found -------------------------------------------------------------------


@pytest.mark.parametrize("target", TARGETS)
def test_what_was_found_once_is_right_for_good(target):
    one_input = importlib.import_module(f"{__package__}.fuzz_{target}").one_input
    files = sorted((CORPUS / target).iterdir())
    assert files
    for file in files:
        try:
            one_input(file.read_bytes())
        except BaseException as error:
            error.add_note(f"for {file}")
            raise


@pytest.mark.parametrize("target", TARGETS)
def test_a_fuzzer_finds_nothing_in_a_few_seconds(target, tmp_path):
    pytest.importorskip("atheris", reason="no atheris is packaged for this platform")
    words = [
        *(sys.executable, "-m", f"tests.fuzz.fuzz_{target}", str(tmp_path), str(CORPUS / target)),
        *(f"-max_total_time={RUN_S}", "-seed=1", f"-artifact_prefix={tmp_path}/"),
    ]
    done = subprocess.run(words, cwd=ROOT, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr[-4000:]
    assert "DONE" in done.stderr
