"""What a site asks of the lots of one assay: limits, decision rule, reference lot, margins, base of charts.

One TOML file an assay. Nothing here decides: that is models.statistics. Units are converted here, once.
"""

from __future__ import annotations

import re
from datetime import date, datetime
from difflib import get_close_matches
from fnmatch import fnmatchcase
from functools import cache
from typing import Any

from pydantic import Field, model_validator

from models.errors import UnknownName
from models.records.record import Record

_PLAUSIBLE_UNIT = re.compile(r"[A-Za-zµ/*^ .\-0-9]{1,40}")
# A power of a number, or one of two digits, is no unit: it would be computed before it is found to be none.
_UNTOWARD_POWER = re.compile(r"(\^|\*\*)\s*-?\s*[0-9]{2,}|[0-9.]\s*(\^|\*\*)|[0-9]{3,}")

_DERIVED = {
    "kcat": "1/s",
    "ki": "umol/L",
    "specific_activity": "umol/min/mg",
    "specific_activity_katal": "nmol/s/mg",
    "sample_activity": "umol/min/mg",
    "sample_activity_katal": "nmol/s/mg",
    "volume_activity": "umol/min/mL",
    "volume_activity_katal": "nmol/s/mL",
}
"""What is worked out from fitted constants, and its unit."""


class DecisionRule(Record):
    """When a value conforms: by a guard band, or by its conformity probability (JCGM 106:2012, 8.3)."""

    guard_band_factor: float | None = Field(default=None, ge=0, le=5)
    """Guard band as a share r of the expanded uncertainty U = k u: 0 decides at the limits themselves, 1
    keeps a whole U away from them."""
    coverage_factor: float = Field(default=2.0, ge=1, le=4)
    """k of the expanded uncertainty U."""
    minimum_probability: float | None = Field(default=None, ge=0.5, lt=1)
    """Least probability that the true value lies within the limits, such as 0.95."""

    @model_validator(mode="after")
    def _one_rule(self) -> DecisionRule:
        if (self.guard_band_factor is None) == (self.minimum_probability is None):
            raise ValueError("state guard_band_factor or minimum_probability, one of both")
        if self.minimum_probability is not None and "coverage_factor" in self.model_fields_set:
            raise ValueError("coverage_factor belongs to guard_band_factor")
        return self


class EquivalenceMargins(Record):
    """How far a lot's constant may lie from the reference lot's, as a ratio (two one-sided tests)."""

    lowest_ratio: float = Field(gt=0, lt=1)
    """Lowest ratio of lot to reference that counts as equivalent."""
    highest_ratio: float = Field(gt=1, le=100)
    """Highest ratio that counts as equivalent."""
    alpha: float = Field(default=0.05, gt=0, lt=0.5)
    """Level of each of the two tests."""


class ConstantSpecification(Record):
    """What is asked of one constant."""

    constant: str = Field(pattern=r"^[a-z][a-z0-9_]*$")
    """The constant, as estimates name it, such as km, k_half, kcat, kcat_per_km or specific_activity."""
    modulator: str | None = Field(default=None, min_length=1)
    """The inhibitor or activator that the constant is about, such as for k_ic; left out for the others."""
    lower: float | None = Field(default=None, ge=0)
    """Lower specification limit, in `unit`."""
    upper: float | None = Field(default=None, gt=0)
    """Upper specification limit, in `unit`."""
    unit: str | None = Field(default=None, min_length=1)
    """Unit of the limits, such as "umol/L", "1/s", "U/mg"; "1" for a pure number."""
    rule: DecisionRule | None = None
    """Decision rule where this constant's differs from the file's."""
    equivalence: EquivalenceMargins | None = None
    """Margins around the reference lot's value."""
    source: str | None = Field(default=None, min_length=3)
    """Where these limits come from, where it is not what the file's `source` says."""

    @model_validator(mode="after")
    def _limits_with_unit(self) -> ConstantSpecification:
        limited = self.lower is not None or self.upper is not None
        if not limited and self.equivalence is None:
            raise ValueError("state lower, upper or [constants.equivalence]: nothing is asked so far")
        if limited != (self.unit is not None):
            raise ValueError("limits and their unit go together")
        if self.lower is not None and self.upper is not None and not self.lower < self.upper:
            raise ValueError(f"lower ({self.lower:g}) must be below upper ({self.upper:g})")
        stored = stored_units().get(self.constant)
        if stored is None:
            near = get_close_matches(self.constant, stored_units(), n=1, cutoff=0.5)
            meant = f", did you mean {near[0]}" if near else ""
            known = ", ".join(sorted(stored_units()))
            raise ValueError(f"there is no constant '{self.constant}'{meant}: constants are {known}")
        try:
            self.limits_in(stored)
        except UnknownName as unknown:
            raise ValueError(f"unit of {self.constant}: {unknown.what}: {unknown.remedy}") from unknown
        return self

    def limits_in(self, unit: str) -> tuple[float | None, float | None]:
        """Lower and upper limit in the unit in which the constant is stored.

        Raises
        ------
        UnknownName
            If the unit of the limits has another dimension.
        """
        if self.unit is None:
            return None, None
        factor = unit_factor(self.unit, unit)
        return (
            None if self.lower is None else self.lower * factor,
            None if self.upper is None else self.upper * factor,
        )


class ChartSettings(Record):
    """Where the limits of a reference lot's control charts come from, and how the EWMA chart is weighted."""

    base_first_day: date | None = None
    """First day of the base period, as 2026-01-15, in the site's time zone."""
    base_last_day: date | None = None
    """Last day of the base period, included."""
    base_plate_reads: tuple[str, ...] = ()
    """The base period as plate reads, by id or plate name, in place of days."""
    ewma_weight: float = Field(default=0.2, gt=0, le=1)
    """Weight of the newest point in the EWMA chart; 0.2 to 0.3 is common practice."""
    ewma_limit_sd: float = Field(default=3.0, gt=0, le=6)
    """Distance of the EWMA chart's limits, in standard deviations of the average."""
    change_alpha: float = Field(default=0.01, gt=0, le=0.2)
    """Significance from which a change of level is marked."""

    @model_validator(mode="after")
    def _one_base(self) -> ChartSettings:
        days = self.base_first_day is not None or self.base_last_day is not None
        if days == bool(self.base_plate_reads):
            raise ValueError("state base_first_day and base_last_day, or base_plate_reads, one of both")
        if days and (self.base_first_day is None or self.base_last_day is None):
            raise ValueError("base_first_day and base_last_day go together")
        if self.base_first_day and self.base_last_day and self.base_first_day > self.base_last_day:
            raise ValueError("base_first_day lies after base_last_day")
        if self.base_plate_reads and len(set(self.base_plate_reads)) < 2:
            raise ValueError("a base period needs two plate reads or more; 20 to 25 are common practice")
        return self

    def in_base(self, measured_at: datetime, plate_read_id: str, plate_id: str) -> bool:
        """Whether a plate read belongs to the base period.

        Parameters
        ----------
        measured_at
            When it was measured, in the site's time zone: days are taken from it as they stand.
        plate_read_id, plate_id
            Its id and the name of its plate.
        """
        if self.base_first_day is None or self.base_last_day is None:
            return plate_read_id in self.base_plate_reads or plate_id in self.base_plate_reads
        return self.base_first_day <= measured_at.date() <= self.base_last_day


class LotSpecification(Record):
    """What is asked of the lots of one assay."""

    assay: str = Field(min_length=1)
    """Name of the assay, as its file is called."""
    source: str = Field(min_length=3)
    """Where the specification comes from: document, version, date."""
    lots: tuple[str, ...] = Field(default=("*",), min_length=1)
    """Patterns of the lots it is for, with * and ?; the reference lot is always among them."""
    reference_lot: str | None = Field(default=None, min_length=1)
    """The lot that others are compared with."""
    rule: DecisionRule
    """Decision rule of all constants that state no other."""
    constants: tuple[ConstantSpecification, ...] = Field(min_length=1)
    """What is asked of each constant."""
    charts: ChartSettings | None = None
    """Base period and settings of the reference lot's control charts."""

    @model_validator(mode="after")
    def _consistent(self) -> LotSpecification:
        stated = [(each.constant, each.modulator) for each in self.constants]
        twice = next((key for key in stated if stated.count(key) > 1), None)
        if twice is not None:
            about = f" with {twice[1]}" if twice[1] else ""
            raise ValueError(f"constants state {twice[0]}{about} twice")
        if self.reference_lot is None and any(each.equivalence is not None for each in self.constants):
            raise ValueError("equivalence needs reference_lot: the lot to compare with")
        if self.reference_lot is None and self.charts is not None:
            raise ValueError("charts need reference_lot: the lot that they follow")
        return self

    def covers(self, lot: str) -> bool:
        """Whether a lot is one of those that the specification is for."""
        return lot == self.reference_lot or any(fnmatchcase(lot, pattern) for pattern in self.lots)

    def of_constant(self, constant: str, modulator: str | None = None) -> ConstantSpecification | None:
        """What is asked of a constant, or None where nothing is."""
        wanted = constant, modulator
        return next((each for each in self.constants if (each.constant, each.modulator) == wanted), None)

    def rule_of(self, specification: ConstantSpecification) -> DecisionRule:
        """The decision rule in force for a constant."""
        return specification.rule or self.rule


@cache
def stored_units() -> dict[str, str]:
    """Every constant that a lot can have a value of, with the unit in which it is stored."""
    # Here, since the laws bring SciPy, which reading a configuration without a specification does not need.
    from models.kinetics.laws import LAWS

    fitted = {constant.name: constant.unit for one in LAWS for constant in one.constants}
    per_half = {f"kcat_per_{one.half_saturation}": "L/mol/s" for one in LAWS if one.half_saturation}
    return {**fitted, **per_half, **_DERIVED}


@cache
def unit_factor(unit: str, stored: str) -> float:
    """Factor from one unit to another of the same dimension.

    Parameters
    ----------
    unit
        As written in a specification: `mmol/L`, `1/min`, `U/mg`, `nkat/mg` ...
    stored
        Unit in which the constant is stored.

    Raises
    ------
    UnknownName
        If either is no unit or their dimensions differ. The classic slip: `mM` is an amount per volume and
        `mm` a length.
    """
    given, wanted = _parsed(unit), _parsed(stored)
    if given.dimensionality != wanted.dimensionality:
        raise UnknownName(
            f"'{unit}' cannot be converted to '{stored}'",
            remedy=f"give the limits in {stored} or a unit of the same kind",
        )
    # As a decimal: 1000, not 999.9999999999999, so that 0.1 mmol/L is 100 umol/L exactly.
    return float(f"{float(given.to(wanted.units).magnitude):.14g}")


def _parsed(unit: str) -> Any:
    remedy = 'write a unit such as "umol/L", "1/s", "L/mol/s" or "U/mg", or "1" for a pure number'
    written = unit.strip().replace("μ", "µ")
    if not _PLAUSIBLE_UNIT.fullmatch(written) or _UNTOWARD_POWER.search(written):
        raise UnknownName(f"'{unit}' is not a unit", remedy=remedy)
    try:
        quantity = _registry().Quantity(written)
    # pint raises many kinds for text that is no unit (undefined name, syntax, type, division by zero).
    except Exception as unreadable:
        raise UnknownName(f"'{unit}' is not a unit", remedy=remedy) from unreadable
    if abs(float(quantity.magnitude) - 1.0) > 1e-12:
        raise UnknownName(f"'{unit}' is a number with a unit", remedy=remedy)
    return quantity


@cache
def _registry() -> Any:
    """A unit registry; building it takes half a second, so it waits for the first unit."""
    import pint

    return pint.UnitRegistry(cache_folder=None)
