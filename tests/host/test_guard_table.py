"""If these fail, the list of guards that a builder relies on leaves one out, or gives a limit that
the firmware does not hold.
"""

from __future__ import annotations

import pytest

from kneewire import hazards
from kneewire.hazards import HAZARDS
from kneewise.workshop import guard_table, pages
from kneewise.workshop.guard_table import as_data, as_markdown, as_text, guard_rows

ROWS = {row.hazard: row for row in guard_rows()}


def test_every_hazard_has_its_row() -> None:
    assert list(ROWS) == list(range(1, 22))
    for hazard, row in ROWS.items():
        assert row.name == HAZARDS[hazard][0]
        for words in (row.measured, row.limit, row.cleared, row.next_step, *row.does):
            assert words
            assert words == words.strip()
        assert row.does


def test_the_numbers_are_those_of_the_firmware() -> None:
    for hazard, row in ROWS.items():
        field, in_a_row, action = hazards.GUARDS[hazard]
        assert (row.field, row.in_a_row) == (field, in_a_row)
        assert row.latches == bool(action & hazards.LATCHES)
        assert field in row.limit


@pytest.mark.parametrize(
    ("hazard", "words"),
    [
        (1, "start_permyriad, 0.01 % to 5 % of Voc"),
        (1, "safe_mv, 0.001 V to 60 V"),
        (3, "dead_time_ms, 20 ms to 1000 ms"),
        (4, "rated_mv, at most 60 V, class B 1000 V"),
        (6, "rated_ma, at most 20 A, class B 50 A"),
        (7, "pulse_us, 1000 us to 20000 us"),
        (10, "at least 70 % of bleed_mohm"),
        (11, "zeros within 24 codes"),
        (15, "capacitance_low_percent, 50 % to 100 % of capacitance_nf"),
        (19, "up to 60 V"),
        (5, "none"),
    ],
)
def test_limits_are_given_with_their_hard_bounds(hazard: int, words: str) -> None:
    assert words in ROWS[hazard].limit


@pytest.mark.parametrize(
    ("hazard", "does", "latches"),
    [
        (4, ("refuses to arm and to fire", "opens the contact in mid-charge"), True),
        (5, ("refuses to arm and to fire",), False),
        (8, ("opens the contact in mid-charge",), False),
        (15, (guard_table.ONLY_LATCHES,), True),
        (21, ("built in: no reading decides it",), False),
    ],
)
def test_what_a_guard_does(hazard: int, does: tuple[str, ...], latches: bool) -> None:
    assert (ROWS[hazard].does, ROWS[hazard].latches) == (does, latches)


def test_each_way_to_show_it_shows_all() -> None:
    text = " ".join(as_text().split())
    lines = as_markdown().splitlines()
    assert len(lines) == 2 + 21
    assert len({line.replace("\\|", "").count("|") for line in lines}) == 1
    for row, line in zip(guard_rows(), lines[2:], strict=True):
        assert line.startswith(f"| H{row.hazard} | {row.name} |")
        for words in (row.limit, row.measured, row.cleared, row.next_step):
            assert words in line
            assert words in text
    assert [one["hazard"] for one in as_data()] == list(ROWS)
    assert max(map(len, as_text().splitlines())) <= 96


def test_a_page_is_made_anew_between_its_marks_alone() -> None:
    page = f"before\n{guard_table.BEGIN}\nold\n{guard_table.END}\nafter {pages.__name__}\n"
    made = pages.made_anew(page)
    assert made.startswith(f"before\n{guard_table.BEGIN}\n\n| guard |")
    assert made.endswith(f"|\n\n{guard_table.END}\nafter {pages.__name__}\n")
    assert pages.made_anew(made) == made
    assert pages.made_anew("no marks\n") == "no marks\n"
    with pytest.raises(ValueError, match="without"):
        pages.made_anew(f"{guard_table.BEGIN}\n")
