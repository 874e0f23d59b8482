"""What is kept over power cycles: the contact's operations, and when the guards were proven.

Comes in: a closing, an opening, a proof test. Goes out: a small file, written only while the
tracer is safe and bled: a write to flash stops the processor for milliseconds. The new file is
written beside the old one and renamed over it, so that a power cut leaves one of the two.
"""

import os

from kneewire.seam import crc32

RECORD_BYTES = 29
NO_DIGEST = bytes(16)


class Logbook:
    """Numbers since the contact was new; `path` of the file, None for none."""

    def __init__(self, path):
        self.path = path
        self.operations = 0
        self.hot_openings = 0
        self.proof_day = 0
        self.proof_digest = NO_DIGEST
        self.changed = False
        self.begun_anew = False  # a file could not be read, now or at an earlier start
        try:
            self._read()
        except OSError:
            pass
        except ValueError:
            self.begun_anew = True

    def _read(self):
        if self.path is None:
            return
        with open(self.path, "rb") as file:
            data = file.read()
        record = data[:-4]
        if len(record) != RECORD_BYTES or crc32(record).to_bytes(4, "little") != data[-4:]:
            raise ValueError("crc")
        self.operations = int.from_bytes(record[0:4], "little")
        self.hot_openings = int.from_bytes(record[4:8], "little")
        self.proof_day = int.from_bytes(record[8:12], "little")
        self.proof_digest = record[12:28]
        self.begun_anew = record[28] != 0

    def closed(self):
        self.operations += 1
        self.changed = True

    def opened_hot(self):
        self.hot_openings += 1
        self.changed = True

    def proven(self, day, digest):
        self.proof_day = day
        self.proof_digest = digest
        self.changed = True

    def keep(self):
        """Write what has changed; False where that cannot be done, and it stays to be done."""
        if not self.changed or self.path is None:
            return not self.changed
        record = b""
        for number in (self.operations, self.hot_openings, self.proof_day):
            record += number.to_bytes(4, "little")
        record += self.proof_digest + bytes([1 if self.begun_anew else 0])
        beside = self.path + ".new"
        try:
            with open(beside, "wb") as file:
                file.write(record + crc32(record).to_bytes(4, "little"))
            os.rename(beside, self.path)
        except OSError:
            return False
        self.changed = False
        return True
