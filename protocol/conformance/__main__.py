"""`python protocol/conformance device PORT` and `python protocol/conformance host`."""

from __future__ import annotations

import sys
from pathlib import Path

if not __package__:
    # Run as a folder: the codec and this package lie beside each other, one level up.
    sys.path[0] = str(Path(__file__).resolve().parents[1])

from conformance.command import main

if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
