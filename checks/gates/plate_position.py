"""Holds a plate read on which the same condition runs differently in a row, a column or at the edge.

Purpose: outer wells dry out or warm first, a pipette's channel doses a whole row or column wrongly. Every
constant of the plate read carries that, and the scatter of replicates hides it.

Formula: relative residuals (v - fitted) / fitted of the laws chosen. Effect of a row, a column or the edge:
median over its wells of the residual less the mean residual of the same condition (series and substrate
level) in wells outside it. Held where the effect that stands out most has |effect| > limit and p <= p_limit,
by permutation of the standardised residuals less what the wells of a condition share, corrected for the
number of rows and columns tried (max T).

What it leaves alone, and why: a row that alone holds a substrate level, or a column that alone holds a
series, differs from the others by more than its place: whether the curve or the place is to blame cannot be
told, and `fit_misfit` looks at the curve. So a layout without replicates in different rows and columns is not
assessed. Of a set of replicates that lie wholly at the edge nothing can be told either.

Source: effects of rows and columns by medians: J. W. Tukey, Exploratory Data Analysis, Addison-Wesley 1977,
ISBN 0-201-07616-0, chapter 11; permutation of residuals: Freedman and Lane 1983
(doi:10.1080/07350015.1983.10509354); correction by max T: P. H. Westfall, S. S. Young, Resampling-Based
Multiple Testing, Wiley 1993, ISBN 978-0-471-55761-6.

Default: 5 % (common practice, no source) and p 0.01: both must hold, so that of a hundred clean plates less
than one is held.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.gate import (
    Gate,
    GateInput,
    Limits,
    Measure,
    Row,
    Setting,
    Subject,
    known_or_none,
    metrics_frame,
    number,
)
from checks.gates.wording import beside, counted, plain
from models.plates import plate_format, row_letters, smallest_format
from models.statistics.position import FEWEST_WELLS, permutation_test, set_contrasts

NAME = "plate_position"
KEY = ["analysis_id", "well"]


def metrics(data: GateInput) -> pd.DataFrame:
    """The row, column or edge of each plate read that stands out most, by how much, and its p value."""
    if data.points is None or data.fits is None:
        raise ValueError("plate_position judges fits: it needs fits and points")
    plates = data.analyses[["analysis_id"]].reset_index(drop=True)
    points = residuals(data)
    number_of = points["plate"].to_numpy(dtype=np.intp)
    ends = np.searchsorted(number_of, np.arange(len(plates) + 1))
    found = [
        _judged(points.iloc[first:last], size)
        if last > first
        else _not_judged("no series of the plate was fitted")
        for first, last, size in zip(ends[:-1], ends[1:], _sizes(data, plates), strict=True)
    ]
    columns = pd.DataFrame(found, columns=["reason", "effect", "p_value", "kind", "place", "well_count"])
    measured = {str(name): columns[name].to_numpy() for name in columns.columns[1:]}
    return metrics_frame(
        "plate_read",
        plates,
        columns["reason"].to_numpy(dtype=object),
        certainty=1.0 - columns["p_value"].to_numpy(dtype=float),
        **measured,
    )


def residuals(data: GateInput) -> pd.DataFrame:
    """Residuals of the fits that count, with each well's place and condition, in order of plate and place.

    Columns of FIT_POINTS, and `plate` (row of `data.analyses`), `block` (condition), row_number,
    column_number, `relative` to the fitted rate, `standardised` and `precision`.
    """
    assert data.fits is not None
    assert data.points is not None
    fits = data.fits
    counting = fits["chosen"].astype(bool) & (fits["wells"] == "clear") & fits["series_id"].notna()
    points = data.points[data.points["fit_id"].isin(fits.loc[counting, "fit_id"])]
    wells = data.wells[[*KEY, "row_number", "column_number", "substrate_um"]]
    points = points.drop(columns="substrate_um").merge(wells, on=KEY)
    fitted = points["fitted_um_per_s"].to_numpy(dtype=float)
    residual = points["v_um_per_s"].to_numpy(dtype=float) - fitted
    with np.errstate(all="ignore"):
        points["relative"] = residual / np.abs(fitted)
        points["standardised"] = residual / points["v_sd_um_per_s"].to_numpy(dtype=float)
        points["precision"] = np.abs(fitted) / points["v_sd_um_per_s"].to_numpy(dtype=float)
    points = points[np.isfinite(points["relative"]) & np.isfinite(points["standardised"])]
    points["plate"] = pd.Index(data.analyses["analysis_id"]).get_indexer(points["analysis_id"])
    points["block"] = points.groupby(["series_id", "substrate_um"], sort=False).ngroup()
    # The order is the plate's own, so that nothing depends on how rows come.
    ordered: pd.DataFrame = points[points["plate"] >= 0].sort_values(["plate", "row_number", "column_number"])
    return ordered


def _sizes(data: GateInput, plates: pd.DataFrame) -> list[tuple[int, int]]:
    """Rows and columns of each plate: as stated, else of the smallest plate that holds its wells."""
    stated = data.plate_reads.set_index("analysis_id")["plate_format"].to_dict()
    last = data.wells.groupby("analysis_id")[["row_number", "column_number"]].max()
    largest = {
        str(analysis): (int(row), int(column))
        for analysis, row, column in zip(last.index, last["row_number"], last["column_number"], strict=True)
    }
    sizes = []
    for analysis in plates["analysis_id"]:
        well_count = known_or_none(stated.get(analysis))
        at_least = largest.get(str(analysis), (1, 1))
        plate = smallest_format([at_least]) if well_count is None else plate_format(int(well_count))
        sizes.append((plate.row_count, plate.column_count))
    return sizes


def _not_judged(reason: str) -> tuple[object, ...]:
    return reason, np.nan, np.nan, None, np.nan, 0


def _judged(points: pd.DataFrame, size: tuple[int, int]) -> tuple[object, ...]:
    row, column = (points[name].to_numpy(dtype=np.intp) for name in ("row_number", "column_number"))
    rows, columns = size
    edge = (row == 1) | (row == rows) | (column == 1) | (column == columns)
    sets = [("row", float(n), row == n) for n in np.unique(row)]
    sets += [("column", float(n), column == n) for n in np.unique(column)]
    sets += [("edge", np.nan, edge)]
    member = np.stack([each[2] for each in sets])
    _, block = np.unique(points["block"].to_numpy(dtype=np.intp), return_inverse=True)
    effect, count = set_contrasts(block, member, points["relative"].to_numpy(dtype=float))
    told = np.flatnonzero(np.isfinite(effect))
    if told.size == 0:
        return _not_judged(
            f"no row, column or edge holds {FEWEST_WELLS} wells whose condition was also measured elsewhere"
        )
    unit = member[told] * points["precision"].to_numpy(dtype=float)
    statistic, p_value = permutation_test(block, unit, points["standardised"].to_numpy(dtype=float))
    if not np.isfinite(statistic).any():
        return _not_judged("replicates of one condition do not differ at all")
    most = int(np.nanargmax(np.abs(statistic)))
    kind, place, _ = sets[told[most]]
    return "", effect[told[most]], p_value[most], kind, place, int(count[told[most]])


def place_name(kind: str, place: float) -> str:
    """Where on the plate: `edge`, `row C`, `column 7`."""
    if kind == "row":
        return f"row {row_letters(int(place))}"
    return f"column {place:.0f}" if kind == "column" else kind


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect no row, column or edge effect that is large and more than chance."""
    from checks import expectations as expect

    bounds = (number(limits, NAME, "limit"), 1.0 - number(limits, NAME, "p_limit"))
    return [expect.not_both(NAME, ("effect", "certainty"), bounds, rule="position")]


def measure(row: Row, limits: Limits) -> Measure:
    """Size of the effect against its limit."""
    effect = known_or_none(row["effect"])
    return Measure(None if effect is None else abs(effect), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """Where the plate runs differently, by how much, and how likely chance is."""
    effect = float(row["effect"])
    measured, limit = beside(abs(effect), number(limits, NAME, "limit"), 100)
    place = place_name(row["kind"], row["place"])
    where = "The edge of the plate" if row["kind"] == "edge" else f"{place[0].upper()}{place[1:]}"
    side = "above" if effect > 0 else "below"
    return (
        f"{where} runs {measured} % {side} the same conditions elsewhere on the plate (limit {limit} %), in "
        f"{counted(row['well_count'], 'well')}: chance does that with probability "
        f"{float(row['p_value']):.2g} (limit {plain(number(limits, NAME, 'p_limit'))})."
    )


GATE = Gate(
    name=NAME,
    subjects=("plate_read",),
    phase="series",
    severity="hold",
    unassessed="clear",
    settings=(
        Setting(
            "limit",
            0.05,
            "1",
            "Relative difference of a row, a column or the edge from the same conditions elsewhere",
            "common practice, no source",
            low=0.001,
            high=10.0,
        ),
        Setting(
            "p_limit",
            0.01,
            "1",
            "Probability, over all rows and columns tried, below which chance does not explain it",
            "common practice; the smallest that the permutations can tell is 0.001",
            low=0.001,
            high=0.5,
        ),
    ),
    text=__doc__,
    needs={"plate_read": ("effect", "p_value")},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
