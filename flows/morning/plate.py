"""One plate as it lies on the bench: its wells with what was measured in each, and what was found of them.

Reads and lays out; the drawing is the template's.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import duckdb
import numpy as np
import pandas as pd
import pyarrow.parquet as pq
from numpy.typing import NDArray

from flows.morning.asking import ask, one
from flows.site.layout import Site
from flows.stages.plate_work import RawReader, channel_of, make_work
from models.plates import plate_format, row_letters

Floats = NDArray[np.float64]

SHOWN = ("progress", "rate", "conversion", "residual", "position")
"""What the wells of a plate can show."""
POINTS_A_CURVE = 24
CURVE_WIDTH, CURVE_HEIGHT = 16.0, 11.0
"""Size of a small curve, in units of the drawing; a well is 24 wide."""


@dataclass(frozen=True)
class Curves:
    """Product of every well over time.

    Attributes
    ----------
    wells
        Names, in order of rows.
    time_s, product_um
        Shape (wells, reads); product is substrate turned over up to a constant, NaN where not usable.
    """

    wells: tuple[str, ...]
    time_s: Floats
    product_um: Floats

    def of(self, well: str) -> tuple[Floats, Floats]:
        """Times and product of one well; empty where it was not read."""
        if well not in self.wells:
            return np.zeros(0), np.zeros(0)
        place = self.wells.index(well)
        return self.time_s[place], self.product_um[place]


@dataclass(frozen=True)
class WellShown:
    """One well of the drawing: its row of the wells table with its rate, and what is drawn inside its ring.

    Attributes
    ----------
    row
        Columns of wells and rates, and `held_by`, the gates that hold it.
    points
        The small curve, as an SVG polyline's points; empty where there is none.
    size
        For quantities: between -1 and 1 of the plate's largest; None where not known.
    """

    row: Any
    points: str
    size: float | None


@dataclass(frozen=True)
class Plate:
    """What the page of a plate shows.

    Attributes
    ----------
    head
        analysis_id, plate_id, assay, measured_at, revision, standing, plate_read_id, recipe_id, map_id,
        export_id.
    findings
        Findings on the plate read as a whole.
    series
        Series with standing and counts.
    """

    head: Any
    row_letters: list[str]
    columns: list[int]
    wells: list[WellShown]
    findings: list[Any]
    series: list[Any]
    statistics: list[Any]
    shown: str


def plate_head(connection: duckdb.DuckDBPyConnection, analysis_id: str) -> Any:
    """The plate read's row of current_analyses, with its format.

    Raises
    ------
    NotFound
        If it is no current analysis.
    """
    return one(
        connection,
        f"current result {analysis_id[:12]}: it may have been superseded",
        "SELECT c.*, p.plate_format FROM current_analyses c JOIN plate_reads p USING (plate_read_id) "
        "WHERE c.analysis_id = $1",
        analysis_id,
    )


def the_plate(connection: duckdb.DuckDBPyConnection, site: Site, analysis_id: str, shown: str) -> Plate:
    """Read a plate and lay out what its wells show.

    Parameters
    ----------
    shown
        One of SHOWN.

    Raises
    ------
    NotFound
        If it is no current analysis.
    """
    head = plate_head(connection, analysis_id)
    wells = ask(
        connection,
        "SELECT w.*, r.v0_um_per_s, r.conversion, r.shape, p.residual, g.held_by "
        "FROM wells w LEFT JOIN rates r USING (analysis_id, well) "
        "LEFT JOIN (SELECT p.well, "
        "  any_value((p.v_um_per_s - p.fitted_um_per_s) / p.v_sd_um_per_s) AS residual "
        "  FROM fit_points p JOIN fits t USING (fit_id) "
        "  WHERE t.analysis_id = $1 AND t.chosen AND t.series_id IS NOT NULL AND t.wells = 'all' "
        "  GROUP BY p.well) p ON p.well = w.well "
        "LEFT JOIN (SELECT well, string_agg(gate, ', ' ORDER BY gate) AS held_by FROM findings "
        "  WHERE analysis_id = $1 AND outcome = 'breach' AND subject = 'well' GROUP BY well) g "
        "  ON g.well = w.well "
        "WHERE w.analysis_id = $1 ORDER BY w.row_number, w.column_number",
        analysis_id,
    )
    shape = plate_format(head.plate_format)
    points = _small_curves(curves_of(connection, site, head)) if shown == "progress" else {}
    sizes = {} if shown == "progress" else _sizes(wells, shown)
    return Plate(
        head,
        [row_letters(number) for number in range(1, shape.row_count + 1)],
        list(range(1, shape.column_count + 1)),
        [WellShown(well, points.get(well.well, ""), sizes.get(well.well)) for well in wells],
        ask(
            connection,
            "SELECT gate, outcome, severity, sentence FROM findings "
            "WHERE analysis_id = $1 AND subject IN ('plate_read', 'lot') ORDER BY outcome, gate",
            analysis_id,
        ),
        ask(
            connection,
            "SELECT series_id, lot, role, enzyme_nm, enzyme_ng_per_ml, modulator, modulator_um, law, "
            "refusal, well_count, clear_well_count, standing FROM series WHERE analysis_id = $1 "
            "ORDER BY role, lot, enzyme_nm, modulator_um",
            analysis_id,
        ),
        ask(connection, "SELECT * FROM plate_statistics WHERE analysis_id = $1", analysis_id),
        shown,
    )


def curves_of(connection: duckdb.DuckDBPyConnection, site: Site, head: Any) -> Curves:
    """Product of every well of a plate read, from the lake's readings by the kept recipe."""
    name = one(
        connection, "plate map", "SELECT file_name FROM files WHERE file_id = $1", head.map_id
    ).file_name
    return _curves(
        site, head.analysis_id, head.plate_read_id, head.plate_id, head.recipe_id, head.map_id, name
    )


@lru_cache(maxsize=64)
def _curves(
    site: Site,
    analysis_id: str,
    plate_read_id: str,
    plate_id: str,
    recipe_id: str,
    map_id: str,
    map_name: str,
) -> Curves:
    # An analysis id fixes all that is read here, so what was read once can be kept.
    del analysis_id
    reader = RawReader(site)
    recipe = reader.recipe(recipe_id)
    readings = pq.read_table(
        site.lake / "readings" / f"{plate_read_id}.parquet", partitioning=None
    ).to_pandas()
    channel = channel_of(sorted(set(readings["channel"])), recipe.assay_name, recipe.assay)
    maps = reader.plate_map(map_id, map_name)
    work = make_work(plate_read_id, plate_id, map_id, recipe, channel, readings, maps)
    frame = work.readings
    codes, names = pd.factorize(frame["well"])
    reads = frame.groupby(codes).cumcount().to_numpy()
    shape = (len(names), int(reads.max(initial=-1)) + 1)
    time_s, signal = np.full(shape, np.nan), np.full(shape, np.nan)
    time_s[codes, reads] = frame["time_s"].to_numpy(dtype=float)
    usable = (frame["state"] == "ok").to_numpy()
    signal[codes, reads] = np.where(usable, frame["signal"].to_numpy(dtype=float, na_value=np.nan), np.nan)
    wells = tuple(str(name) for name in names)
    limit = recipe.assay.signal.linear_limit
    if limit is not None:
        signal[signal > limit] = np.nan
    return Curves(wells, time_s, work.conversion.turnover_um(wells, signal))


def _small_curves(curves: Curves) -> dict[str, str]:
    """Points of each well's small curve, from its own first read, all on the plate's one scale."""
    if curves.product_um.size == 0:
        return {}
    count = curves.product_um.shape[1]
    kept = np.unique(np.linspace(0, count - 1, min(count, POINTS_A_CURVE)).astype(int))
    time_s, product = curves.time_s[:, kept], curves.product_um[:, kept]
    with np.errstate(all="ignore"):
        start = np.array([row[np.isfinite(row)][:1].sum() for row in product])
        rise = product - start[:, None]
        top = float(np.nanpercentile(np.abs(rise), 99.0)) or 1.0
        x = CURVE_WIDTH * (time_s / np.nanmax(time_s) - 0.5)
        y = CURVE_HEIGHT * (0.5 - np.clip(rise / top, -0.2, 1.1))
    return {
        well: " ".join(f"{a:.1f},{b:.1f}" for a, b in zip(across, down, strict=True) if np.isfinite(b))
        for well, across, down in zip(curves.wells, x, y, strict=True)
    }


def _sizes(wells: list[Any], shown: str) -> dict[str, float]:
    """What each well shows, over the largest of the plate."""
    field = {"rate": "v0_um_per_s", "conversion": "conversion"}.get(shown, "residual")
    values = {well.well: getattr(well, field) for well in wells if getattr(well, field) is not None}
    if shown == "position":
        values = _by_place(wells, values)
    known = {well: float(value) for well, value in values.items() if np.isfinite(value)}
    # Beyond four standard errors a residual is as large as it can look.
    top = 4.0 if shown in ("residual", "position") else max(map(abs, known.values()), default=1.0) or 1.0
    return {well: float(np.clip(value / top, -1.0, 1.0)) for well, value in known.items()}


def _by_place(wells: list[Any], residuals: dict[str, float]) -> dict[str, float]:
    """Mean residual of each well's row and column: what a place on the plate does to all that stand there."""
    rows: dict[int, list[float]] = {}
    columns: dict[int, list[float]] = {}
    for well in wells:
        if well.well in residuals:
            rows.setdefault(well.row_number, []).append(residuals[well.well])
            columns.setdefault(well.column_number, []).append(residuals[well.well])
    return {
        well.well: 0.5
        * (
            float(np.mean(rows[well.row_number])) * len(rows[well.row_number]) ** 0.5
            + float(np.mean(columns[well.column_number])) * len(columns[well.column_number]) ** 0.5
        )
        for well in wells
        if well.well in residuals
    }
