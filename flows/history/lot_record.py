"""What is said of a lot, as plain records: values, decisions, comparison, charts.

Reads nothing and draws nothing. Every number has the unit that stands beside it; what is not known is None.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from models.statistics.change_points import ChangePoint
from models.statistics.charts import ChartBase, EwmaChart, IndividualsChart, Signal
from models.statistics.conformity import Decision
from models.statistics.equivalence import Equivalence
from models.statistics.lot_decisions import Judgement


@dataclass(frozen=True)
class SourceValue:
    """One estimate that a lot's value rests on.

    Attributes
    ----------
    own_error
        Standard error without the error of the assay's calibration, which all plate reads share.
    series_standing
        clear, or held where the whole series waits.
    """

    estimate_id: str
    plate_read_id: str
    plate_id: str
    measured_at: datetime
    analysis_id: str
    series_id: str | None
    fit_id: str
    law: str
    value: float
    standard_error: float | None
    low: float | None
    high: float | None
    own_error: float
    shared_relative_error: float
    series_standing: str


@dataclass(frozen=True)
class ConstantRecord:
    """One constant of the lot.

    Attributes
    ----------
    low, high
        95 % interval over plate reads; None where open, and both None with one plate read.
    between_plate_sd
        Standard deviation between plate reads beyond what their errors explain; None with one.
    value_plate_reads
        Plate reads the value rests on.
    sources
        Estimates it rests on, in order of time.
    judgement
        Against the specification; None where nothing is asked of the constant.
    rule
        The decision rule in words; empty where nothing is asked.
    equivalence
        Against the reference lot; None where no margins are stated.
    margins
        Lowest and highest ratio that count as equivalent.
    """

    lot_value_id: str
    constant: str
    modulator: str | None
    value: float | None
    standard_error: float | None
    low: float | None
    high: float | None
    unit: str
    between_plate_sd: float | None
    value_plate_reads: int
    held_only: bool
    reason: str | None
    sources: tuple[SourceValue, ...]
    judgement: Judgement | None = None
    rule: str = ""
    equivalence: Equivalence | None = None
    margins: tuple[float, float] | None = None

    @property
    def one_plate_only(self) -> bool:
        """Whether nothing is known of the spread between plates."""
        return self.value_plate_reads < 2

    @property
    def decision(self) -> Decision | None:
        """The decision, or None where nothing is asked."""
        return None if self.judgement is None else self.judgement.decision


@dataclass(frozen=True)
class ChartPoint:
    """A constant on one plate read."""

    plate_id: str
    plate_read_id: str
    measured_at: datetime
    value: float
    in_base: bool


@dataclass(frozen=True)
class ChartRecord:
    """Control charts of one constant of one lot.

    Attributes
    ----------
    signals
        Broken Western Electric rules, by place in `points` and number.
    changes
        Places where the level changed.
    marked
        Plate reads on which the lot asked about stands.
    """

    lot: str
    constant: str
    unit: str
    points: tuple[ChartPoint, ...]
    base: ChartBase
    individuals: IndividualsChart
    ewma: EwmaChart
    signals: tuple[Signal, ...]
    changes: tuple[ChangePoint, ...]
    marked: frozenset[str]


@dataclass(frozen=True)
class UsedSpecification:
    """The specification that a lot is held against.

    Attributes
    ----------
    digest
        SHA-256 of `content` as canonical JSON: the same text gives the same decision from the same values.
    """

    name: str
    source: str
    digest: str
    content: Mapping[str, Any]
    reference_lot: str | None
    base_period: str


@dataclass(frozen=True)
class PlateReadOfLot:
    """A plate read on which the lot stands, in its current revision."""

    plate_read_id: str
    plate_id: str
    measured_at: datetime
    analysis_id: str
    revision: int
    standing: str
    series_count: int
    held_series_count: int


@dataclass(frozen=True)
class LotRecord:
    """A lot in one assay.

    Attributes
    ----------
    decision
        Over all constants that are asked of it; None without a specification.
    decision_id
        Digest of lot, assay, values and specification: what fixes the decision.
    missing
        Constants that the specification asks of and the lot has no value of.
    notes
        What a reader must know before relying on the numbers.
    """

    lot: str
    assay: str
    role: str
    standing: str
    pass_id: str
    measured_at: datetime
    constants: tuple[ConstantRecord, ...]
    plate_reads: tuple[PlateReadOfLot, ...]
    specification: UsedSpecification | None
    decision: Decision | None
    decision_id: str | None
    missing: tuple[str, ...]
    charts: tuple[ChartRecord, ...]
    chart_note: str
    notes: tuple[str, ...]

    def constant(self, name: str, modulator: str | None = None) -> ConstantRecord:
        """One constant of the lot.

        Raises
        ------
        KeyError
            If it has none of that name.
        """
        for each in self.constants:
            if (each.constant, each.modulator) == (name, modulator):
                return each
        raise KeyError(name)
