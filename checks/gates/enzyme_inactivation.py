"""Holds a lot that loses activity while it is read: Selwyn's test.

Purpose: an enzyme that dies in the well bends its curves as depletion does, and the rate that is left to
measure is too low, the more so the longer the read must be. More enzyme for a shorter time gives another
answer than less for longer.

Formula: at equal substrate (and modulator), product is one function of enzyme x time for every enzyme level,
unless activity changes with time. P = F(s (1 - exp(-k t)) / k) is fitted to all curves of a level, F a cubic
common to them, each curve with its own start and initial rate s (dispensed enzyme differs by a few per cent;
whether rates are in proportion to enzyme is `enzyme_linearity`'s question). Levels are combined, each by its
weight. Held where the one-sided p value of k > 0 is at most limit and at least least_loss of the activity is
lost by the last read. Curves are product less the matching blank's slope, up to 40 % conversion.

What it leaves alone, and why: a lot at one enzyme level, which cannot tell dying from running dry: there
`initial_slope_nonlinear` and `initial_vs_full_curve` see that something bends its curves. A lag or burst
common to all curves is fitted beside the loss where the curves show one. Without much difference between the
levels the error of k is large and nothing is held.

Source: Selwyn 1965, Biochim. Biophys. Acta 105, 193-195 (doi:10.1016/S0926-6593(65)80190-4, the DOI from
memory).

Default: p 0.01 (common practice, no source); a loss below 10 % of the activity over the whole read moves
rates from its first half by less than 5 %.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.enzyme_linearity import CONDITION, KEY, LOT, enzyme_wells, lots_at_several_levels
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
from checks.gates.wording import plain
from models.statistics.selwyn import Inactivation, combine, selwyn_test

NAME = "enzyme_inactivation"
HIGHEST_CONVERSION = 0.4
"""Up to here a cubic follows any curve of product against enzyme x time to 1e-4 of the substrate."""


def metrics(data: GateInput) -> pd.DataFrame:
    """Activity that each lot loses over its read, and the p value of its losing any."""
    wells = enzyme_wells(data)
    lots = lots_at_several_levels(wells)
    levels = wells.groupby([*LOT, *CONDITION], dropna=False)["enzyme"].transform("nunique")
    several = wells[levels > 1]
    curves = _curves(data, several)
    groups = dict(list(curves.groupby(LOT, sort=False)))
    dosed = set(map(tuple, several[LOT].to_numpy().tolist()))
    found = [
        _judged(groups.get((analysis, lot)), (analysis, lot) in dosed)
        for analysis, lot in zip(lots["analysis_id"], lots["lot"], strict=True)
    ]
    columns = pd.DataFrame(found, columns=["reason", "lost", "p_value", "longest_s", "curve_count"])
    measured = {str(name): columns[name].to_numpy() for name in columns.columns[1:]}
    return metrics_frame(
        "lot",
        lots,
        columns["reason"].to_numpy(dtype=object),
        certainty=1.0 - columns["p_value"].to_numpy(dtype=float),
        **measured,
    )


def _curves(data: GateInput, wells: pd.DataFrame) -> pd.DataFrame:
    """Reads of these wells with product less the blank, and the product at which a curve is left."""
    if wells.empty:
        return pd.DataFrame(columns=[*LOT, *CONDITION])
    rates = data.rates.loc[data.rates["v0_um_per_s"].notna(), [*KEY, "blank_rate_um_per_s"]]
    wells = wells.merge(rates, on=KEY).merge(data.analyses[["analysis_id", "recipe_id"]], on="analysis_id")
    wells["most_um"] = [
        HIGHEST_CONVERSION * data.assays[recipe].consumable_um(float(substrate))
        for recipe, substrate in zip(wells["recipe_id"], wells["substrate_um"], strict=True)
    ]
    readings = data.readings.loc[
        data.readings["state"] == "ok", [*KEY, "read_number", "time_s", "product_um"]
    ]
    curves: pd.DataFrame = wells.merge(readings, on=KEY)
    blank = curves["blank_rate_um_per_s"].astype(float).fillna(0.0)
    curves["net_um"] = curves["product_um"] - blank * curves["time_s"]
    return curves.sort_values(["analysis_id", "well", "read_number"])


def _judged(curves: pd.DataFrame | None, several: bool) -> tuple[object, ...]:
    if not several:
        return "no two enzyme levels of the lot share a substrate level", np.nan, np.nan, np.nan, 0
    tests: list[Inactivation] = []
    longest_s = np.nan
    if curves is not None:
        longest_s = float(curves["time_s"].max())
        for _, level in curves.groupby(CONDITION, dropna=False):
            curve, wells = pd.factorize(level["well"])
            enzyme = level.drop_duplicates("well")["enzyme"].to_numpy(dtype=float)
            test = selwyn_test(
                curve,
                level["time_s"].to_numpy(dtype=float),
                level["net_um"].to_numpy(dtype=float),
                enzyme[: len(wells)],
                float(level["most_um"].iloc[0]),
            )
            tests += [] if test is None else [test]
    if not tests:
        reason = "no two enzyme levels at equal substrate have curves that overlap in enzyme x time"
        return reason, np.nan, np.nan, np.nan, 0
    whole = combine(tests)
    lost = max(0.0, -float(np.expm1(-whole.loss_per_s * longest_s)))
    return "", lost, whole.p_value, longest_s, whole.curve_count


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect an enzyme that keeps its activity, or a loss that is small or chance explains."""
    from checks import expectations as expect

    bounds = (number(limits, NAME, "least_loss"), 1.0 - number(limits, NAME, "limit"))
    return [expect.not_both(NAME, ("lost", "certainty"), bounds, rule="loss")]


def measure(row: Row, limits: Limits) -> Measure:
    """The p value against its limit."""
    return Measure(known_or_none(row["p_value"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """How much activity is lost, and how likely chance is."""
    limit = plain(number(limits, NAME, "limit"))
    return (
        "Product against enzyme x time does not superimpose (Selwyn's test): the lot loses "
        f"{float(row['lost']) * 100:.0f} % of its activity in {float(row['longest_s']):.0f} s, by "
        f"{row['curve_count']:.0f} curves; chance does that with probability {float(row['p_value']):.2g} "
        f"(limit {limit})."
    )


GATE = Gate(
    name=NAME,
    subjects=("lot",),
    phase="series",
    severity="hold",
    unassessed="clear",
    settings=(
        Setting(
            "limit",
            0.01,
            "1",
            "Probability below which chance does not explain that curves fall behind",
            "common practice, no source",
            low=1e-12,
            high=0.5,
        ),
        Setting(
            "least_loss",
            0.10,
            "1",
            "Share of the activity lost by the last read below which a loss is left alone",
            "moves rates from the first half of the read by less than 5 %, no source",
            low=0.0,
            high=1.0,
        ),
    ),
    text=__doc__,
    needs={"lot": ("lost", "p_value")},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
