"""If these fail, a guard does not do what the table of hazards says, or the host tells it wrongly.

The cases are rows of `hazards.py`, each proven on the rungs that it names; those on the emulated
chip are in tests/chip.
"""

import pytest
from rig import needs_micropython
from system.hazard_plays import prove
from system.hazards import IN_PROCESS, MICROPYTHON, all_cases, cases_on


@pytest.mark.parametrize("case", cases_on(IN_PROCESS), ids=lambda case: case.name)
def test_in_process(case):
    """In-process at every moment that the case names."""
    for at_us in case.at_us:
        prove(case, IN_PROCESS, at_us)


@needs_micropython
@pytest.mark.parametrize("case", cases_on(MICROPYTHON), ids=lambda case: case.name)
def test_in_micropython(case):
    prove(case, MICROPYTHON)


def test_every_hazard_has_a_case():
    assert {case.hazard for case in all_cases()} == set(range(1, 22))
    names = [case.name for case in all_cases()]
    assert len(set(names)) == len(names)
