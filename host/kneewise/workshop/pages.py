"""What pages hold of the code's own texts: `python -m kneewise.workshop.pages README.md ...`.

Between the marks of a page everything is replaced: the cautions, and the table of guards. A test
fails when a page has drifted. A page holds the marks of what it wants.
"""

from __future__ import annotations

import sys
from pathlib import Path

from kneewise.instrument import cautions
from kneewise.workshop import guard_table

PARTS = (
    (cautions.BEGIN, cautions.END, cautions.as_markdown),
    (guard_table.BEGIN, guard_table.END, guard_table.as_markdown),
)


def made_anew(page: str) -> str:
    """`page` with what stands between marks made anew. ValueError for a mark without its end."""
    for begin, end, made in PARTS:
        if begin in page:
            before, _, rest = page.partition(begin)
            _, found, after = rest.partition(end)
            if not found:
                raise ValueError(f"{begin} without {end}")
            page = f"{before}{begin}\n\n{made()}\n\n{end}{after}"
    return page


if __name__ == "__main__":
    for name in sys.argv[1:]:
        path = Path(name)
        path.write_text(made_anew(path.read_text(encoding="utf-8")), encoding="utf-8")
