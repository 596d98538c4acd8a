"""What a gate is, what it reads, and the shape of its metrics. Holds no gate and no limit.

Great Expectations is imported only inside a gate's `expectations`: importing this package costs nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, Literal

import numpy as np
import pandas as pd

from models.records.assay import Assay, SettingValue

Phase = Literal["wells", "fit", "series"]
Subject = Literal["well", "series", "lot", "plate_read"]
Limits = dict[str, dict[str, SettingValue]]
Row = Mapping[str, Any]

SUBJECT_KEYS: dict[Subject, tuple[str, ...]] = {
    "well": ("analysis_id", "well"),
    "series": ("analysis_id", "series_id"),
    "lot": ("analysis_id", "lot"),
    "plate_read": ("analysis_id",),
}
ID_COLUMNS = ("subject", "analysis_id", "well", "series_id", "lot")
ENZYME_ROLES = ("sample", "reference")
READ_ROLES = ("sample", "reference", "blank", "enzyme_blank")
BEYOND_DETECTOR = ("overflow", "past_limit")
NO_RATE = "no rate could be measured in this well"


@dataclass(frozen=True)
class Setting:
    """One number or switch of a gate that a site may change.

    Attributes
    ----------
    unit
        Unit of the value: `1` for a share or ratio, empty for a switch.
    meaning, why
        What it does, and why its default is what it is.
    low, high
        Smallest and largest value allowed; not used for a switch.
    """

    name: str
    default: SettingValue
    unit: str
    meaning: str
    why: str
    low: float = 0.0
    high: float = float("inf")


@dataclass(frozen=True)
class Measure:
    """What a breached rule measured, its limit, and the unit of both; None for what is not known."""

    value: float | None
    limit: float | None
    unit: str


@dataclass(frozen=True)
class Gate:
    """One rule: what it measures, and how that is held against its limits.

    Attributes
    ----------
    subjects
        What its findings are about.
    phase
        `wells` where it judges rates before the fit; `fit` where it judges wells by a first fit of the wells
        that are clear so far, which is done again without those it holds; `series` where it judges the final
        fit.
    severity
        Severity of its usual breach; a rule that makes a subject void says so in its expectation.
    unassessed
        Standing of a subject that the gate could not judge.
    text
        The module's docstring: purpose, formula, source, default and why.
    needs
        Metrics that must be known, by subject: a row that lacks one is not assessed.
    metrics
        Rows of `ID_COLUMNS`, `reason` (None where it could be assessed) and measured columns.
    expectations
        Great Expectations expectations of one subject under all limits of a recipe, worst first.
    measure, sentence
        Of one flagged row, which carries `subject` and the `rule` it breached.
    """

    name: str
    subjects: tuple[Subject, ...]
    phase: Phase
    severity: Literal["hold", "void"]
    unassessed: Literal["clear", "held"]
    settings: tuple[Setting, ...]
    text: str
    needs: Mapping[Subject, tuple[str, ...]]
    metrics: Callable[[GateInput], pd.DataFrame]
    expectations: Callable[[Limits, Subject], list[Any]]
    measure: Callable[[Row, Limits], Measure]
    sentence: Callable[[Row, Limits], str]

    @property
    def purpose(self) -> str:
        """First paragraph of the module's docstring."""
        return " ".join(self.text.strip().split("\n\n")[0].split())


@dataclass(frozen=True)
class Reads:
    """Readings of all wells in order of well and read number.

    Attributes
    ----------
    wells
        One row a well: analysis_id and well.
    code
        (R,) row of `wells` each read belongs to, ascending.
    read_number, time_s, signal
        (R,) floats; `signal` is NaN where there is none.
    beyond, missing
        (R,) whether a read is past the detector's range, and whether it is missing.
    """

    wells: pd.DataFrame
    code: np.ndarray
    read_number: np.ndarray
    time_s: np.ndarray
    signal: np.ndarray
    beyond: np.ndarray
    missing: np.ndarray

    def count(self, chosen: np.ndarray) -> np.ndarray:
        """How many of the chosen reads (R,) each well has."""
        return np.bincount(self.code[chosen], minlength=len(self.wells))

    def for_wells(self, values: np.ndarray, wells: pd.DataFrame, absent: float = np.nan) -> np.ndarray:
        """A value a read well (rows of `self.wells`), laid out for other wells; `absent` where not read."""
        series = pd.Series(values, index=pd.MultiIndex.from_frame(self.wells))
        found = series.reindex(pd.MultiIndex.from_frame(wells[["analysis_id", "well"]]))
        return found.to_numpy(dtype=float, na_value=absent)


PLATE_READ_COLUMNS = ("analysis_id", "plate_format", "temperature_low_c", "temperature_high_c")
STANDARD_COLUMNS = ("analysis_id", "well", "product_um", "signal", "back_calculated_um")


def no_plate_reads() -> pd.DataFrame:
    """Plate reads of a batch that has none."""
    return pd.DataFrame(columns=list(PLATE_READ_COLUMNS))


def no_standards() -> pd.DataFrame:
    """Standards of a batch without standard curves of its own."""
    return pd.DataFrame(columns=list(STANDARD_COLUMNS))


@dataclass(frozen=True)
class GateInput:
    """Frames of a batch that the gates read; columns as in `models.tables`.

    Attributes
    ----------
    analyses
        analysis_id, recipe_id, assay.
    wells
        WELLS without standing.
    readings
        analysis_id, well, read_number, time_s, signal, state (ok, overflow, missing, past_limit), product_um
        (substrate turned over up to a constant [umol/L], blank not subtracted; NaN where not usable).
    rates
        RATES.
    series, estimates, fits, points
        SERIES without standing, ESTIMATES, FITS, FIT_POINTS with series_id; None before the fit. All laws,
        with clear wells and with all: the fit that counts has `chosen` and wells `clear`. Points are those
        of fits that are chosen.
    comparisons
        COMPARISONS; None before the final fit.
    plate_reads
        analysis_id, plate_format, temperature_low_c, temperature_high_c (NaN where not reported).
    standards
        analysis_id, well, product_um (known), signal (mean over the reads) and back_calculated_um of each
        standard that made a plate's own standard curve; no row for other plates.
    assays
        The assay of each recipe.
    """

    analyses: pd.DataFrame
    wells: pd.DataFrame
    readings: pd.DataFrame
    rates: pd.DataFrame
    series: pd.DataFrame | None = None
    estimates: pd.DataFrame | None = None
    fits: pd.DataFrame | None = None
    points: pd.DataFrame | None = None
    comparisons: pd.DataFrame | None = None
    plate_reads: pd.DataFrame = field(default_factory=no_plate_reads)
    standards: pd.DataFrame = field(default_factory=no_standards)
    assays: Mapping[str, Assay] = field(default_factory=dict)

    @cached_property
    def reads(self) -> Reads:
        """The readings in order, with wells coded as integers: sorted once for all gates."""
        frame = self.readings
        analysis_code, analyses = pd.factorize(frame["analysis_id"])
        well_code, wells = pd.factorize(frame["well"])
        present, code = np.unique(analysis_code * max(len(wells), 1) + well_code, return_inverse=True)
        read_number = frame["read_number"].to_numpy(dtype=float)
        order = np.lexsort((read_number, code))
        state = frame["state"]
        names = pd.DataFrame(
            {
                "analysis_id": analyses.take(present // max(len(wells), 1)),
                "well": wells.take(present % max(len(wells), 1)),
            }
        )
        return Reads(
            wells=names,
            code=code[order],
            read_number=read_number[order],
            time_s=frame["time_s"].to_numpy(dtype=float)[order],
            signal=frame["signal"].to_numpy(dtype=float, na_value=np.nan)[order],
            beyond=state.isin(BEYOND_DETECTOR).to_numpy()[order],
            missing=(state == "missing").to_numpy()[order],
        )

    def wells_with_rates(self, roles: Sequence[str], *, with_substrate: bool = False) -> pd.DataFrame:
        """Wells of these roles, each beside its row of rates (NaN where it has none)."""
        chosen = self.wells["role"].isin(roles)
        if with_substrate:
            chosen &= self.wells["substrate_um"] > 0
        columns = ["analysis_id", "well", "role", "substrate_um", "series_id"]
        wells = self.wells.loc[chosen, columns]
        joined = wells.merge(self.rates, on=["analysis_id", "well"], how="left", validate="1:1")
        joined["shape"] = joined["shape"].astype(object).where(joined["shape"].notna(), "unread")
        return joined


def metrics_frame(
    subject: Subject, rows: pd.DataFrame, reason: np.ndarray | str, **measured: Any
) -> pd.DataFrame:
    """Metrics of one subject: ids from `rows`, why a row is not assessed (empty where it is), measured."""
    keys = SUBJECT_KEYS[subject]
    ids = {name: rows[name].to_numpy(dtype=object) if name in keys else None for name in ID_COLUMNS[1:]}
    frame = pd.DataFrame({"subject": subject, **ids, "reason": reason, **measured}, index=range(len(rows)))
    frame["reason"] = frame["reason"].astype(object).where(frame["reason"] != "", None)
    return frame


def known_or_none(value: object) -> float | None:
    """A finite number as a float, anything else as None."""
    if isinstance(value, (int, float, np.integer, np.floating)) and np.isfinite(value):
        return float(value)
    return None


def number(limits: Limits, gate: str, setting: str) -> float:
    """A limit as a float."""
    return float(limits[gate][setting])
