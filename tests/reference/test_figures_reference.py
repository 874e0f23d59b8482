"""Figures of two measured curves against an extraction by another hand.

The curves: R.T.C. France cell at 33 degC and Photowatt PWP201 module at 45 degC, published by
Easwarakhanthan, Bottin, Bouhouch and Boutrit, Int. J. Solar Energy 4 (1986) 1-12, as reprinted
in later papers. The figures: `pvlib.ivtools.utils.astm_e1036` (method of ASTM E1036) on the
same points. Its quartic is itself up to 0.27 % off in Pmp, so agreement within 0.5 % is what
can be asked for.
"""

from __future__ import annotations

import numpy as np
import pytest
from pvlib.ivtools.utils import astm_e1036  # type: ignore[import-untyped]

from kneewise.curve.figures import extract

CELL = """
-0.2057 0.7640  -0.1291 0.7620  -0.0588 0.7605  0.0057 0.7605  0.0646 0.7600  0.1185 0.7590
0.1678 0.7570  0.2132 0.7570  0.2545 0.7555  0.2924 0.7540  0.3269 0.7505  0.3585 0.7465
0.3873 0.7385  0.4137 0.7280  0.4373 0.7065  0.4590 0.6755  0.4784 0.6320  0.4960 0.5730
0.5119 0.4990  0.5265 0.4130  0.5398 0.3165  0.5521 0.2120  0.5633 0.1035  0.5736 -0.0100
0.5833 -0.1230  0.5900 -0.2100
"""
MODULE = """
0.1248 1.0315  1.8093 1.0300  3.3511 1.0260  4.7622 1.0220  6.0538 1.0180  7.2364 1.0155
8.3189 1.0140  9.3097 1.0100  10.2163 1.0035  11.0449 0.9880  11.8018 0.9630  12.4929 0.9255
13.1231 0.8725  13.6983 0.8075  14.2221 0.7265  14.6995 0.6345  15.1346 0.5345  15.5311 0.4275
15.8929 0.3185  16.2229 0.2085  16.5241 0.1010  16.7987 -0.0080  17.0499 -0.1110
17.2793 -0.2090  17.4885 -0.3030
"""


@pytest.mark.parametrize(
    ("points", "astm"),
    [
        (
            CELL,
            {
                "isc": 0.760349,
                "voc": 0.572532,
                "imp": 0.689393,
                "vmp": 0.450905,
                "pmp": 0.310851,
                "ff": 0.714069,
            },
        ),
        (
            MODULE,
            {
                "isc": 1.032148,
                "voc": 16.776017,
                "imp": 0.916843,
                "vmp": 12.611,
                "pmp": 11.562305,
                "ff": 0.66775,
            },
        ),
    ],
    ids=["cell", "module"],
)
def test_published_curves_agree_with_the_astm_e1036_extraction(
    points: str, astm: dict[str, float]
) -> None:
    voltage, current = np.array(points.split(), dtype=np.float64).reshape(-1, 2).T
    fresh = astm_e1036(voltage, current)
    for name, value in astm.items():
        assert fresh[name] == pytest.approx(value, rel=1e-5)
    none = np.zeros_like(voltage)
    figures = extract(
        voltage,
        current,
        weight=np.ones_like(voltage),
        voltage_sigma=none,
        # The points are given to 0.5 mA, so evenly spread by 0.5 mA about their value.
        current_sigma=none + 0.5e-3 / np.sqrt(12.0),
    )
    for name, quantity in figures.named():
        assert quantity.value == pytest.approx(astm[name], rel=0.005), name
