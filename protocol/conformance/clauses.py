"""The clauses of SPEC.md: whom each binds, and which of them show on the wire.

A value of `DEVICE` or `HOST` is CHECKED, OTHER where the clause binds the other side alone, or
the reason why nobody can see from outside whether it is kept.
"""

from __future__ import annotations

CHECKED = ""
OTHER = "binds the other side"

# clause: (for a device, for a host)
CLAUSES: dict[str, tuple[str, str]] = {
    "F1": (CHECKED, CHECKED),
    "F2": (CHECKED, CHECKED),
    "F3": (CHECKED, CHECKED),
    "F4": (CHECKED, CHECKED),
    "F5": (CHECKED, OTHER),
    "F6": (CHECKED, CHECKED),
    "F7": (CHECKED, CHECKED),
    "F8": (CHECKED, CHECKED),
    "F9": (CHECKED, OTHER),
    "B1": (CHECKED, CHECKED),
    "B2": (CHECKED, CHECKED),
    "B3": (CHECKED, OTHER),
    "B4": (CHECKED, OTHER),
    "B5": (CHECKED, OTHER),
    "B6": (OTHER, CHECKED),
    "B7": (CHECKED, "how a reserved code is shown, its user sees"),
    "H1": (CHECKED, CHECKED),
    "H2": (CHECKED, CHECKED),
    "H3": (CHECKED, "what a host reads in a reply does not show"),
    "H4": (CHECKED, OTHER),
    "H5": (OTHER, CHECKED),
    "S1": (CHECKED, CHECKED),
    "S2": (CHECKED, OTHER),
    "S3": (CHECKED, OTHER),
    "S4": (CHECKED, OTHER),
    "S5": (CHECKED, OTHER),
    "S6": (OTHER, CHECKED),
    "W1": (CHECKED, CHECKED),
    "W2": (CHECKED, OTHER),
    "W3": (CHECKED, CHECKED),
    "W4": (CHECKED, OTHER),
    "W5": (CHECKED, CHECKED),
    "W6": (CHECKED, OTHER),
    "W7": (CHECKED, CHECKED),
    "W8": (CHECKED, CHECKED),
    "W9": (CHECKED, OTHER),
    "W10": (CHECKED, CHECKED),
    "W11": (CHECKED, CHECKED),
    "W12": (OTHER, CHECKED),
    "W13": (CHECKED, OTHER),
    "W14": (OTHER, CHECKED),
    "K1": (CHECKED, OTHER),
    "K2": (CHECKED, OTHER),
    "K3": (CHECKED, OTHER),
    "K4": (CHECKED, OTHER),
    "K5": (CHECKED, CHECKED),
    "K6": (CHECKED, OTHER),
    "K7": (CHECKED, CHECKED),
    "K8": (OTHER, CHECKED),
    "A1": (CHECKED, OTHER),
    "A2": (CHECKED, CHECKED),
    "A3": (CHECKED, OTHER),
    "R1": (OTHER, CHECKED),
    "R2": (OTHER, CHECKED),
    "R3": (CHECKED, CHECKED),
    "R4": (CHECKED, OTHER),
    "R5": (CHECKED, OTHER),
    "C1": (OTHER, CHECKED),
    "C2": (OTHER, CHECKED),
    "C3": (CHECKED, "how a host tells lost from late does not show"),
    "T1": (CHECKED, OTHER),
    "T2": (CHECKED, CHECKED),
    "V1": ("one version does not show what the next will keep",) * 2,
    "V2": ("the host judges the fingerprint", CHECKED),
    "V3": ("one version does not show what the next will add", CHECKED),
    "V4": (OTHER, "what a host says, its user sees"),
    "V5": ("binds this repository",) * 2,
}

DEVICE = {name: sides[0] for name, sides in CLAUSES.items()}
HOST = {name: sides[1] for name, sides in CLAUSES.items()}
