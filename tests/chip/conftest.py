"""One emulated chip at its prompt for the tests of the board file."""

from collections.abc import Iterator

import pytest
from board_runs import CODES, IDLE_APP
from chip import Chip


@pytest.fixture(scope="module")
def shared() -> Iterator[Chip]:
    with Chip(files=IDLE_APP, plant={"codes": CODES}) as chip:
        yield chip


@pytest.fixture
def chip(shared: Chip) -> Chip:
    shared.order("describe", plant={"codes": CODES})
    shared.prompt()
    shared.edges()
    return shared
