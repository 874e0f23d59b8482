"""A hello that arrives at a MicroPython prompt does nothing there.

Without these, asking a board whether it is a tracer could run a line, reset the board or leave
it in the raw prompt. What a prompt does with a byte is taken from MicroPython's own line editor
(shared/readline/readline.c); the last tests here compare with a real one.
"""

from __future__ import annotations

import importlib.util
import itertools
import os
import re
import select
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from kneewire import PROTOCOL, framing
from kneewire.messages import NO_SESSION, fingerprint, pack
from kneewire.seam import crc32
from kneewise.errors import LinkError
from kneewise.link.session import HELLO_SEQUENCE, LETTERS, Session

REPEATS = 11
# COBS codes, and the mark of what is escaped, which moves a prompt's cursor.
CODE_AND_VERSION = {0x12, 0x06, PROTOCOL[0], 0x02}


class SilentPort:
    """A port on which nobody answers; its clock goes on with every read."""

    name = "silent"

    def __init__(self) -> None:
        self.now = 0.0
        self.written: list[bytes] = []

    def clock(self) -> float:
        return self.now

    def sleep(self, seconds: float) -> None:
        self.now += seconds

    def read(self, timeout_s: float) -> bytes:
        self.now += max(timeout_s, 0.001)
        return b""

    def write(self, data: bytes) -> None:
        self.written.append(data)

    def close(self) -> None:
        pass


def sent(host_nonce: int | None = None) -> list[bytes]:
    """What a session writes while its hello gets no answer."""
    port = SilentPort()
    with pytest.raises(LinkError):
        Session(port, host_nonce=host_nonce).hello()
    return port.written


def nonces() -> Iterator[int]:
    """Nonces in an arbitrary but fixed order."""
    for step in itertools.count(1):
        letters = bytes(LETTERS[step * prime % 52] for prime in (1, 7, 11, 17))
        yield int.from_bytes(letters, "little")


def harmless(byte: int) -> bool:
    """True for what a prompt only inserts or passes over."""
    return 0x20 <= byte <= 0x7E or byte >= 0x80


def crc_is_harmless(nonce: int, version: tuple[int, int] = PROTOCOL) -> bool:
    return all(harmless(byte) for byte in crc32(body(nonce, version)).to_bytes(4, "little"))


def body(nonce: int, version: tuple[int, int] = PROTOCOL) -> bytes:
    values = {
        "host_nonce": nonce,
        "fingerprint": fingerprint(),
        "major": version[0],
        "minor": version[1],
    }
    return pack("hello", NO_SESSION, HELLO_SEQUENCE, values)


def quiet_nonces(count: int, version: tuple[int, int] = PROTOCOL) -> list[int]:
    found = (nonce for nonce in nonces() if crc_is_harmless(nonce, version))
    return list(itertools.islice(found, count))


class Prompt:
    """MicroPython's line editor, as far as a hello can reach it.

    `ran` are the lines that it would have run, `left` the bytes that would have left the prompt
    (raw prompt, banner, interrupt, soft reset, paste mode).
    """

    def __init__(self) -> None:
        self.line = ""
        self.cursor = 0
        self.ran: list[str] = []
        self.left: list[int] = []

    def feed(self, data: bytes) -> None:
        for byte in data:
            self._take(byte)

    def _take(self, byte: int) -> None:
        line, cursor = self.line, self.cursor
        if byte == 3 or (1 <= byte <= 5 and not line):
            self.left.append(byte)
        elif byte in {0x0A, 0x0D}:  # the unix port takes a newline for Enter as well
            self.ran.append(line)
            self.line, self.cursor = "", 0
        elif byte == 1:
            self.cursor = 0
        elif byte == 2:
            self.cursor = max(cursor - 1, 0)
        elif byte == 4:
            self.line = line[:cursor] + line[cursor + 1 :]
        elif byte == 5:
            self.cursor = len(line)
        elif byte == 6:
            self.cursor = min(cursor + 1, len(line))
        elif byte in {0x08, 0x7F}:
            self.line = line[: max(cursor - 1, 0)] + line[cursor:]
            self.cursor = max(cursor - 1, 0)
        elif byte in {0x09, 0x0B, 0x0E, 0x10, 0x15, 0x17, 0x1B}:
            # Completion, history, cutting, escape sequences: no hello should go near them.
            raise AssertionError(f"byte {byte:02x} in a hello")
        elif 0x20 <= byte <= 0x7E:
            self.line = line[:cursor] + chr(byte) + line[cursor:]
            self.cursor = cursor + 1


@pytest.mark.clause("R1", "H5")
def test_session_begins_with_a_comment_sign_and_one_hello() -> None:
    nonce = quiet_nonces(1)[0]
    frame = framing.encode(body(nonce), toward_device=True)
    written = sent(nonce)
    # The byte that ends a raw prompt comes along once nobody has answered.
    assert set(written[:3]) == {b"#\x00" + frame}
    assert set(written[3:]) == {b"\x02\x00#\x00" + frame}
    assert len(written) == REPEATS


@pytest.mark.clause("H5")
def test_fingerprint_holds_no_byte_that_a_prompt_acts_on() -> None:
    assert all(byte >= 0x80 for byte in fingerprint().to_bytes(4, "little"))


def test_half_of_all_nonces_make_a_harmless_hello() -> None:
    drawn = list(itertools.islice(nonces(), 400))
    quiet = [nonce for nonce in drawn if crc_is_harmless(nonce)]
    assert 0.4 < len(quiet) / len(drawn) < 0.75  # (223 / 256) ** 4 on the mean


@pytest.mark.parametrize("nonce", quiet_nonces(50))
@pytest.mark.clause("H5")
def test_hello_holds_only_the_control_bytes_that_it_cannot_avoid(nonce: int) -> None:
    frame = framing.encode(body(nonce), toward_device=True)
    assert {byte for byte in frame[:-1] if not harmless(byte)} <= CODE_AND_VERSION
    assert not set(frame) & {0x03, 0x0A, 0x0D}


def test_every_session_draws_a_nonce_that_makes_a_harmless_hello() -> None:
    for _ in range(300):
        for data in sent():
            held = {byte for byte in data.strip(b"\x00") if not harmless(byte)} - {0}
            assert held <= CODE_AND_VERSION


@pytest.mark.parametrize(
    "version", [(0, minor) for minor in range(1, 9)] + [(1, minor) for minor in range(9)]
)
@pytest.mark.clause("H5")
def test_hello_neither_runs_a_line_nor_leaves_the_prompt(version: tuple[int, int]) -> None:
    for nonce in quiet_nonces(20, version):
        hello = b"#\x00" + framing.encode(body(nonce, version), toward_device=True)
        for lost in range(2):  # a link's first byte is the likeliest to be lost
            prompt = Prompt()
            prompt.feed((hello * REPEATS)[lost:])
            assert (prompt.ran, prompt.left) == ([], [])
            assert "HiKne" in prompt.line  # by its echo a host can know that a prompt is there


# -- a real prompt -----------------------------------------------------------------------

real_prompt = pytest.mark.skipif(
    os.name != "posix" or importlib.util.find_spec("micropython_unix") is None,
    reason="no MicroPython for this platform: its wheel is for Linux on x86_64",
)


class RealPrompt:
    """MicroPython's prompt on a pty; `home` is where it looks for lines typed earlier."""

    def __init__(self, home: Path) -> None:
        import pty
        import tty

        self._terminal, theirs = pty.openpty()
        tty.setraw(theirs)
        self._process = subprocess.Popen(
            [sys.executable, "-m", "micropython_unix", "-i", "-X", "heapsize=200k"],
            stdin=theirs,
            stdout=theirs,
            stderr=theirs,
            env={**os.environ, "HOME": str(home)},
        )
        os.close(theirs)
        self.said_until(b">>> ")

    def __enter__(self) -> RealPrompt:
        return self

    def __exit__(self, *_: object) -> None:
        self._process.kill()
        self._process.wait()
        os.close(self._terminal)

    def write(self, data: bytes) -> None:
        os.write(self._terminal, data)

    def said_until(self, mark: bytes) -> bytes:
        """What the prompt says up to and with `mark`."""
        said = b""
        end = time.monotonic() + 10
        while mark not in said:
            ready, _, _ = select.select([self._terminal], [], [], end - time.monotonic())
            if not ready:
                raise TimeoutError(said)
            said += os.read(self._terminal, 4096)
        return said

    def run(self, line: bytes) -> bytes:
        """What `line` prints, typed at an empty prompt."""
        self.write(line + b"\r")
        return self.said_until(b"\n>>> ").splitlines()[1]


@real_prompt
def test_a_real_prompt_stays_where_it_was(tmp_path: Path) -> None:
    nonce = quiet_nonces(1)[0]
    with RealPrompt(tmp_path) as prompt:
        prompt.run(b"kept = 6 * 7")
        for _ in range(REPEATS):
            prompt.write(sent(nonce)[0])
        prompt.write(b"\x05<end>")
        said = prompt.said_until(b"<end>")
        assert b"\n" not in said  # no line was run, nothing was announced
        prompt.write(b"\x03")  # Ctrl-C: away with the line
        prompt.said_until(b">>> ")
        assert prompt.run(b"print(kept)") == b"42"  # and no reset has come between


@real_prompt
def test_a_real_prompt_edits_the_line_as_the_model_does(tmp_path: Path) -> None:
    with RealPrompt(tmp_path) as prompt:
        for version in (PROTOCOL, (0, 2), (0, 3), (0, 4), (0, 5), (1, 0), (1, 2)):
            for nonce in quiet_nonces(12, version):
                hello = b"#\x00" + framing.encode(body(nonce, version), toward_device=True)
                if re.search(rb"['\\\"]", hello):
                    continue  # the line could not be quoted
                model = Prompt()
                model.feed(hello * 2)
                prompt.write(hello * 2 + b"\x01print('\x05')\r")
                said = prompt.said_until(b"\n>>> ")
                assert said.splitlines()[-2].decode() == model.line
