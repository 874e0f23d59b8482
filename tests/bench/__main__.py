"""`python -m tests.bench NAME [--json] [--quick]`: the numbers of one part, a row each.

Where time matters the value is a median of ratios taken in one run.
"""

from __future__ import annotations

import argparse
import importlib
import json

NAMES = ("wire", "knots", "safety")


def main() -> int:
    parser = argparse.ArgumentParser(prog="python -m tests.bench", description=__doc__)
    parser.add_argument("name", choices=NAMES)
    parser.add_argument("--json", action="store_true", help="one list of rows")
    parser.add_argument("--quick", action="store_true", help="fewer repeats")
    chosen = parser.parse_args()
    rows = list(importlib.import_module(f".{chosen.name}", __package__).rows(chosen.quick))
    if chosen.json:
        print(json.dumps([row.as_json() for row in rows], indent=1))
    else:
        width = max(len(row.name) for row in rows)
        print("\n".join(row.as_text(width) for row in rows))
    return 0 if all(row.holds for row in rows) else 1


if __name__ == "__main__":
    raise SystemExit(main())
