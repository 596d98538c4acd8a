"""Holds a plate read whose standards do not lie on their own curve.

Purpose: where a plate brings its standards, every product and every rate of it is read off their curve. A
standard that does not read back as what it is, or a bend that the curve does not follow, is in all of them.

Formula, the first rule that is breached is told:

- bend: relative change of slope, over the range of the standards, of product read back against known product
  (a parabola through all standards, each weighted by 1 / max(known product, a fifth of the highest)^2)
  > limit, where |t| of its square term >= t_limit: what is left of the standards' shape once the curve has
  been taken off. A rate at one end is off from one at the other by that.
- error: |mean product read back at a level - known product| / max(known product, a fifth of the highest
  standard) > limit, at the worst level.

What it leaves alone, and why: (1) Near zero, and so near the detection limit, any error is large against the
level: levels below a fifth of the highest standard, zero included, are judged as if that high. (2) A
standard with no product read back lies beyond the curve's reach, where wells have no product either. (3) With
no more than three standards read back a bend has no t: it shows in the errors alone. Plates without a curve
of their own: not applicable.

Source: back-calculated standards: ICH guideline M10 on bioanalytical method validation, 2022, section 3.2.3.
Bend against a straight line: K. Emancipator, M. H. Kroll, Clin. Chem. 39 (1993) 766-772.

Default: 5 % (common practice, no source); t of 4, as for wells. With a fifth of the highest standard as
floor, straight curves of duplicates up to 0.8 AU or more, with 3 mAU between wells and 1 % of dispensing, are
held less than once in a hundred; single standards, or shorter curves, two to four times (simulated).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.gate import (
    ENZYME_ROLES,
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
from checks.gates.wording import beside

NAME = "standard_curve"
LOW_LEVEL_SHARE = 0.2
"""Share of the highest standard below which a level's error is taken relative to that share."""
FEWEST_LEVELS = 3
"""Levels read back below which a curve cannot be judged: a line meets any two."""


def metrics(data: GateInput) -> pd.DataFrame:
    """Worst error of a level, and bend, of standards of plate reads with enzyme and a curve of their own."""
    own = {
        recipe
        for recipe, assay in data.assays.items()
        if assay.standard_curve is not None and assay.standard_curve.points_from == "plate"
    }
    has_curve = data.analyses["recipe_id"].isin(own)
    has_curve |= data.analyses["analysis_id"].isin(data.standards["analysis_id"])
    with_rates = data.wells.loc[data.wells["role"].isin(ENZYME_ROLES), "analysis_id"]
    has_curve &= data.analyses["analysis_id"].isin(with_rates)
    plates = data.analyses.loc[has_curve, ["analysis_id"]].reset_index(drop=True)
    row = pd.Index(plates["analysis_id"]).get_indexer(data.standards["analysis_id"])
    known_um = data.standards["product_um"].to_numpy(dtype=float, na_value=np.nan)
    read_um = data.standards["back_calculated_um"].to_numpy(dtype=float, na_value=np.nan)
    used = (row >= 0) & np.isfinite(known_um) & np.isfinite(read_um)
    row, known_um, read_um = row[used], known_um[used], read_um[used]
    worst = _worst_level(row, known_um, read_um).reindex(range(len(plates)))
    slope_change, slope_change_t = _bend(row, known_um, read_um, len(plates))
    enough = worst["level_count"].to_numpy(dtype=float) >= FEWEST_LEVELS
    why = f"fewer than {FEWEST_LEVELS} levels of the plate's standards can be read back from their curve"
    return metrics_frame(
        "plate_read",
        plates,
        np.where(enough, "", why),
        error=np.where(enough, worst["error"], np.nan),
        level_um=worst["level_um"].to_numpy(dtype=float),
        read_um=worst["read_um"].to_numpy(dtype=float),
        against_um=worst["against_um"].to_numpy(dtype=float),
        slope_change=np.where(enough, slope_change, np.nan),
        slope_change_t=slope_change_t,
    )


def _worst_level(row: np.ndarray, known_um: np.ndarray, read_um: np.ndarray) -> pd.DataFrame:
    """The level furthest off, one row a plate, with how many levels there are."""
    standards = pd.DataFrame({"row": row, "level_um": known_um, "read_um": read_um})
    levels = standards.groupby(["row", "level_um"])["read_um"].mean().reset_index()
    of_plate = levels.groupby("row")["level_um"]
    levels["level_count"] = of_plate.transform("size")
    levels["against_um"] = levels["level_um"].clip(lower=LOW_LEVEL_SHARE * of_plate.transform("max"))
    with np.errstate(divide="ignore", invalid="ignore"):
        levels["error"] = (levels["read_um"] - levels["level_um"]).abs() / levels["against_um"]
    worst = levels.sort_values(["row", "error", "level_um"], ascending=[True, False, True], kind="stable")
    return worst.drop_duplicates("row").set_index("row")


def _bend(
    row: np.ndarray, known_um: np.ndarray, read_um: np.ndarray, count: int
) -> tuple[np.ndarray, np.ndarray]:
    """Relative change of slope of product read back over the range of the standards, and its |t|.

    By the parabola through each plate's standards, in polynomials that are orthogonal over them; shape
    (plates,) each, NaN where there is nothing to fit or to spare. Without weights the highest standards,
    whose errors of dispensing are the largest, would bend a straight curve by themselves.
    """
    members = np.bincount(row, minlength=count).astype(float)
    high, low = np.full(count, -np.inf), np.full(count, np.inf)
    np.maximum.at(high, row, known_um)
    np.minimum.at(low, row, known_um)
    with np.errstate(divide="ignore", invalid="ignore"):
        span = high - low
        weight = (high[row] / np.maximum(known_um, LOW_LEVEL_SHARE * high[row])) ** 2

        def total(values: np.ndarray) -> np.ndarray:
            return np.bincount(row, weights=weight * values, minlength=count)

        mass = total(np.ones_like(known_um))
        x = (known_um - (total(known_um) / mass)[row]) / span[row]
        y = (read_um - (total(read_um) / mass)[row]) / span[row]
        square = total(x**2)
        line = total(x * y) / square
        # The square less its own mean and its projection on x: what a line cannot take up.
        bow = x**2 - (square / mass)[row] - (total(x**3) / square)[row] * x
        bow_square = total(bow**2)
        height = total(bow * y) / bow_square
        residual = y - line[row] * x - height[row] * bow
        variance = total(residual**2) / (members - 3.0)
        t = np.abs(height) / np.sqrt(variance / bow_square)
        # Over a span of 1 the derivative of height x^2 changes by 2 height.
        change = np.abs(2.0 * height / line)
    return change, np.where(members > 3, t, np.nan)


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect no bend, and standards that read back as what they are."""
    from checks import expectations as expect

    limit = number(limits, NAME, "limit")
    return [
        expect.not_both(
            NAME,
            ("slope_change", "slope_change_t"),
            (limit, number(limits, NAME, "t_limit")),
            rule="bend",
        ),
        expect.at_most(NAME, "error", limit, rule="error"),
    ]


def measure(row: Row, limits: Limits) -> Measure:
    """Change of slope, or error of the worst level, against the limit."""
    value = row["slope_change" if row["rule"] == "bend" else "error"]
    return Measure(known_or_none(value), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """What is wrong with the curve, and what that does to the rates."""
    limit = number(limits, NAME, "limit")
    if row["rule"] == "bend":
        measured, limit_text = beside(float(row["slope_change"]), limit, 100)
        return (
            f"Read back from their own curve, the standards change slope by {measured} % over their range "
            f"(limit {limit_text} %): the curve has not their shape, and rates at its ends differ by that."
        )
    measured, limit_text = beside(float(row["error"]), limit, 100)
    low = row["level_um"] < row["against_um"]
    of_what = f"off, against {row['against_um']:.4g} µM," if low else "off"
    return (
        f"The standards of {row['level_um']:.6g} µM read back as {row['read_um']:.4g} µM from their own "
        f"curve: {measured} % {of_what} (limit {limit_text} %), and so are products read there."
    )


GATE = Gate(
    name=NAME,
    subjects=("plate_read",),
    phase="wells",
    severity="hold",
    unassessed="held",
    settings=(
        Setting(
            "limit",
            0.05,
            "1",
            "Relative error of a level read back, and relative change of slope over the standards' range",
            "common practice, no source",
            low=0.001,
            high=1.0,
        ),
        Setting(
            "t_limit",
            4.0,
            "1",
            "t value below which a change of slope is not believed",
            "chance alone exceeds it in 1 curve of 100 with eight standards; fewer with more",
            low=0.0,
            high=100.0,
        ),
    ),
    text=__doc__,
    needs={"plate_read": ("error",)},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
