"""What travels down the line between stages: plate reads with their map and recipe, and what is made of them.

Plain frozen records; nothing here reads, writes or computes.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import pandas as pd

from checks.assess import GateRun
from flows.site.recipes import Recipe
from flows.stages.conversion import Conversion
from models.identity import result_id
from models.kinetics.curves import CurveBatch


@dataclass(frozen=True)
class PlateWork:
    """One plate read that is ready to be analysed.

    Attributes
    ----------
    readings
        Readings of the assay's channel, columns of the `readings` table.
    conversion
        How its signal becomes substrate turned over.
    wells
        The plate map's wells, columns of the `wells` table from `well` to `product_um`.
    """

    plate_read_id: str
    plate_id: str
    map_id: str
    recipe: Recipe
    readings: pd.DataFrame
    wells: pd.DataFrame
    conversion: Conversion

    @property
    def analysis_id(self) -> str:
        """Digest of what fixes this plate read's results: its bytes, its map, its recipe, no decisions."""
        return result_id("analysis", self.plate_read_id, self.map_id, self.recipe.recipe_id, [])


@dataclass(frozen=True)
class RatedBatch:
    """Plate reads with the rate of every well, before anything is judged.

    Attributes
    ----------
    wells
        Columns of the `wells` table without `standing`, and `plate` and `series` as numbers within the batch.
    reads
        analysis_id, well, read_number, time_s, signal, state, product_um: every read, past the linear limit
        said so; product_um is substrate turned over up to a constant, where the read is usable.
    rates
        Columns of the `rates` table, row for row with `wells` of a role that has a rate.
    series
        series_id, analysis_id, assay, lot, role, enzyme and modulator levels, `series` and `plate` numbers.
    curves
        Progress curves of the wells in `rates`, row for row.
    """

    plates: Sequence[PlateWork]
    wells: pd.DataFrame
    reads: pd.DataFrame
    rates: pd.DataFrame
    series: pd.DataFrame
    curves: CurveBatch


@dataclass(frozen=True)
class GatedBatch:
    """Rated plate reads with findings on wells and plate reads, each well's standing, and gates' metrics."""

    rated: RatedBatch
    wells: pd.DataFrame
    findings: pd.DataFrame
    runs: Sequence[GateRun]
    metrics: Mapping[str, pd.DataFrame] = field(default_factory=dict)


@dataclass(frozen=True)
class FittedBatch:
    """All that is to be stored of a batch, by table name, and the gate runs behind it."""

    plates: Sequence[PlateWork]
    tables: dict[str, pd.DataFrame]
    runs: Sequence[GateRun] = field(default_factory=tuple)
