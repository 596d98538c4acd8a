"""What an assay may choose for its standard curve: names and defaults alone.

Imports nothing heavy, so that reading a configuration stays quick.
"""

from __future__ import annotations

from typing import Literal, get_args

Model = Literal["linear", "quadratic", "four_parameter"]
Weighting = Literal["constant", "proportional", "replicates"]
Direction = Literal["rises", "falls"]

WEIGHTINGS: tuple[str, ...] = get_args(Weighting)

EXTRAPOLATION = 0.05
"""Share of the range of standards by which a product may lie beyond it: noise about the lowest standard must
not be cut (common practice, no source)."""
