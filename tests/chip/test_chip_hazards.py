"""If these fail, a guard that holds elsewhere does not hold on the board that people build.

The cases are rows of tests/system/hazards.py. What can only be let go wrong from within the
firmware (a supervision that stops, an endless loop) is in test_chip_faults.py.
"""

import pytest
from chip import missing
from system.hazard_plays import prove
from system.hazards import CHIP, Case, cases_on

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))


@pytest.mark.parametrize("case", cases_on(CHIP), ids=lambda case: case.name)
def test_on_the_chip(case: Case) -> None:
    prove(case, CHIP)
