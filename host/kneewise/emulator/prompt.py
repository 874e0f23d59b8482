"""The MicroPython prompt as a host meets it on the in-process rung, where there is none.

Comes in: bytes from the host. Goes out: what a prompt would answer, and what it would do: start
the firmware again, or reset. Of Python it knows the one line that starts the firmware; all else
is an error, as damaged bytes are. The process rung and the chip rung have the real one.
"""

from __future__ import annotations

START_LINE = "from tracer import app; app.main()"
START = "start"
RESET = "reset"

BANNER = (
    b'\r\nMicroPython v1.28.0 on CPython, in-process\r\nType "help()" for more information.\r\n'
)
PROMPT = b">>> "
RAW = b"raw REPL; CTRL-B to exit\r\n>"
_CTRL_A, _CTRL_B, _CTRL_C, _CTRL_D, _RETURN, _BACKSPACE = 1, 2, 3, 4, 13, 8
_ERROR = (
    b"Traceback (most recent call last):\r\n"
    b'  File "<stdin>", line 1\r\n'
    b"SyntaxError: invalid syntax\r\n"
)


class Prompt:
    """Feed it; `said` is taken away by the caller."""

    def __init__(self) -> None:
        self.said = BANNER + PROMPT
        self._line = bytearray()
        self._raw = False

    def feed(self, data: bytes) -> tuple[str, bytes]:
        """What is to be done (START, RESET or "") and the bytes behind it."""
        for place, byte in enumerate(data):
            done = self._raw_byte(byte) if self._raw else self._byte(byte)
            if done:
                return done, data[place + 1 :]
        return "", b""

    def _byte(self, byte: int) -> str:
        line = self._line
        if byte == _CTRL_C:
            line.clear()
            self.said += b"\r\n" + PROMPT
        elif byte == _CTRL_A and not line:
            self._raw = True
            self.said += b"\r\n" + RAW
        elif byte == _CTRL_B and not line:
            self.said += BANNER + PROMPT
        elif byte == _CTRL_D and not line:
            self.said += b"\r\n"
            return RESET
        elif byte == _BACKSPACE:
            del line[-1:]
        elif byte == _RETURN:
            text = bytes(line).decode("latin-1").strip()
            line.clear()
            self.said += b"\r\n"
            if text == START_LINE:
                return START
            self.said += (_ERROR if text and not text.startswith("#") else b"") + PROMPT
        elif 32 <= byte < 127:
            line.append(byte)
            self.said += bytes([byte])
        return ""

    def _raw_byte(self, byte: int) -> str:
        line = self._line
        if byte == _CTRL_B:
            self._raw = False
            line.clear()
            self.said += BANNER + PROMPT
        elif byte == _CTRL_C:
            line.clear()
        elif byte == _CTRL_D:
            if not line:
                self.said += b"\r\n"
                return RESET
            line.clear()
            self.said += b"OK\x04" + _ERROR + b"\x04>"
        elif byte >= 32:
            line.append(byte)
        return ""
