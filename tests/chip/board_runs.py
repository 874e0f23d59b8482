"""What the tests of the board file share: constants, the first lines of a script, the wave."""

from chip import Edge

PERIOD_US = 39
CALL_US = 200  # of the interpreter, from reading the clock to the effect of the next call
CODES = [1000, 2000, 3000]
PULSE, RELAY, RELEASE = 2, 3, 4
IDLE_APP = {"/tracer/app.py": "def main():\n    pass\n"}
START = "from tracer.hal_rp2 import Hal\nhal = Hal()\n"


def wave(edges: list[Edge]) -> list[Edge]:
    """The pulse pin's edges from the first rise on."""
    pulse = [edge for edge in edges if edge.pin == PULSE]
    first = next(place for place, edge in enumerate(pulse) if edge.level == 1)
    return pulse[first:]
