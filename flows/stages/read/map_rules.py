"""What a row of a plate map must and must not hold, by its role.

Knows nothing of files: a problem comes back as a sentence and a remedy.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

ROLES = ("sample", "reference", "blank", "enzyme_blank", "standard", "empty")

_WITH_ENZYME = ("sample", "reference")


@dataclass(frozen=True)
class Row:
    """One well as the map states it; `numbers` by column of `wells`, NaN where empty."""

    line: int
    plate_id: str
    position: tuple[int, int]
    role: str
    lot: str | None
    modulator: str | None
    assay: str | None
    numbers: Mapping[str, float]

    def stated(self, column: str) -> float | None:
        """The number in a column, or None where it is empty or the map has no such column."""
        value = self.numbers.get(column, math.nan)
        return None if math.isnan(value) else value

    def number(self, column: str) -> float:
        """The number in a column, NaN where it is empty; 0 for the substrate of an enzyme blank."""
        value = self.stated(column)
        if value is None and column == "substrate_um" and self.role == "enzyme_blank":
            return 0.0
        return math.nan if value is None else value


def check_row(row: Row) -> tuple[str, str] | None:
    """What is wrong with a row and what to do, or None."""
    by_amount, by_mass = row.stated("enzyme_nm"), row.stated("enzyme_ng_per_ml")
    if by_amount is not None and by_mass is not None:
        return "enzyme is given by amount and by mass", "give one of the two"
    enzyme = by_amount if by_amount is not None else by_mass
    substrate = row.stated("substrate_um")
    if row.role in _WITH_ENZYME and row.lot is None:
        return f"a {row.role} needs a lot", "fill the column lot"
    if row.role in _WITH_ENZYME and substrate is None:
        return (
            f"a {row.role} needs its substrate concentration",
            "fill the column substrate; 0 is a concentration",
        )
    if row.role == "blank" and enzyme:
        return "a blank holds everything but enzyme, and enzyme is stated", "set it to 0 or leave it empty"
    if row.role == "enzyme_blank" and substrate:
        return "an enzyme_blank holds everything but substrate, and substrate is stated", "set it to 0"
    if row.role == "standard" and row.stated("product_um") is None:
        return "a standard needs its product concentration", "fill the column product"
    if row.modulator is None and row.stated("modulator_um"):
        return "a modulator concentration is given without a modulator", "fill the column modulator"
    if row.modulator is not None and row.stated("modulator_um") is None:
        return "a modulator is named without its concentration", "fill the column modulator with its unit"
    return None
