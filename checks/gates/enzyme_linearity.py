"""Holds a lot whose rate is not in proportion to its enzyme.

Purpose: kcat, specific activity and every comparison of lots suppose that twice the enzyme makes twice the
rate. Where it does not, a dilution is wrong, the enzyme sticks, dissociates or is limited by something else.

Formula: rates at equal substrate (and modulator) of two or more enzyme levels of a lot on one plate,
v = a [E] through zero with an a for each substrate, fitted with an own factor for each enzyme level on a
logarithmic scale; each rate weighs by its standard error and the scatter found between wells. Held where
the level that departs most lies more than limit off the line through zero of the other levels, and the F test
of all factors being equal has p <= p_limit. Rates are first brought from the mean substrate over their window
to the nominal one, by the order in substrate that the lot's own neighbouring levels show (with one substrate
level that is not known, and a difference of up to half the conversion limit stays).

What it leaves alone, and why: wells that the fit leaves out, since a well that runs dry is not a lack of
proportion; in series that were not fitted, wells whose curve is not straight. Rates below 5 standard errors
tell nothing about proportion. For a lot at one enzyme level the question does not arise; one without a well
to spare is not assessed.

Source: v in proportion to [E] as a condition of any rate assay: M. Dixon, E. C. Webb, Enzymes, 3rd ed.,
Longman 1979, ISBN 0-582-46217-X; F test: Draper and Smith 1998 (doi:10.1002/9781118625590).

Default: 10 % (common practice, no source), with p 0.01: pipetting of one level alone makes 2 to 3 %.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from scipy.stats import f as f_distribution

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
from checks.gates.wording import beside, plain

NAME = "enzyme_linearity"
KEY = ["analysis_id", "well"]
LOT = ["analysis_id", "lot"]
CONDITION = ["substrate_um", "modulator", "modulator_um"]
TELLING_T = 5.0
HIGHEST_ORDER = 4.0
_LARGEST_CV = 2.0
_BISECTIONS = 40


def metrics(data: GateInput) -> pd.DataFrame:
    """The enzyme level of each lot that departs most from proportion, by how much, and the p value."""
    if data.points is None or data.fits is None:
        raise ValueError("enzyme_linearity judges fits: it needs fits and points")
    wells = enzyme_wells(data)
    lots = lots_at_several_levels(wells)
    rates = _telling_rates(data, wells)
    groups = dict(list(rates.groupby(LOT, sort=False)))
    found = [
        _judged(groups.get((analysis, lot), rates.iloc[:0]))
        for analysis, lot in zip(lots["analysis_id"], lots["lot"], strict=True)
    ]
    columns = pd.DataFrame(found, columns=["reason", "departure", "p_value", "level", "unit", "level_count"])
    measured = {str(name): columns[name].to_numpy() for name in columns.columns[1:]}
    return metrics_frame(
        "lot",
        lots,
        columns["reason"].to_numpy(dtype=object),
        certainty=1.0 - columns["p_value"].to_numpy(dtype=float),
        **measured,
    )


def enzyme_wells(data: GateInput) -> pd.DataFrame:
    """Wells with enzyme and substrate, with their enzyme level in `enzyme` and its unit in `enzyme_unit`."""
    names = [*KEY, "role", "lot", "series_id", *CONDITION, "enzyme_nm", "enzyme_ng_per_ml"]
    wells = data.wells.reindex(columns=names)
    wells = wells[wells["role"].isin(ENZYME_ROLES) & wells["lot"].notna() & (wells["substrate_um"] > 0)]
    amount, mass = wells["enzyme_nm"].astype(float), wells["enzyme_ng_per_ml"].astype(float)
    return wells.assign(
        enzyme=amount.where(amount.notna(), mass),
        enzyme_unit=np.where(amount.notna(), "nmol/L", "ng/mL"),
        modulator_um=wells["modulator_um"].astype(float).fillna(0.0),
    ).reset_index(drop=True)


def lots_at_several_levels(wells: pd.DataFrame) -> pd.DataFrame:
    """Lots of each plate read that it holds at more than one enzyme level: analysis_id and lot."""
    several = wells.groupby(LOT, sort=False)["enzyme"].transform("nunique") > 1
    lots: pd.DataFrame = wells.loc[several, LOT].drop_duplicates(ignore_index=True)
    return lots


def _telling_rates(data: GateInput, wells: pd.DataFrame) -> pd.DataFrame:
    """Rates that the fits were made of, and straight ones of series that were not fitted."""
    assert data.fits is not None
    assert data.points is not None
    counting = data.fits["chosen"].astype(bool) & (data.fits["wells"] == "clear")
    points = data.points.loc[data.points["fit_id"].isin(data.fits.loc[counting, "fit_id"]), KEY]
    fitted = pd.MultiIndex.from_frame(wells[KEY]).isin(pd.MultiIndex.from_frame(points))
    series = set(wells.loc[fitted, "series_id"])
    names = [*KEY, "v0_um_per_s", "v0_se_um_per_s", "mean_substrate_um", "shape"]
    rates = wells.assign(fitted=fitted).merge(data.rates[names], on=KEY)
    usable = rates["fitted"] | (~rates["series_id"].isin(series) & (rates["shape"] == "straight"))
    telling = rates["v0_um_per_s"] > TELLING_T * rates["v0_se_um_per_s"]
    return rates[usable & telling & (rates["enzyme"] > 0)]


def _not_judged(reason: str) -> tuple[object, ...]:
    return reason, np.nan, np.nan, np.nan, None, 0


def _judged(rates: pd.DataFrame) -> tuple[object, ...]:
    rates = rates.sort_values(["enzyme", *CONDITION, "v0_um_per_s"]).reset_index(drop=True)
    condition = rates.groupby(CONDITION, dropna=False)
    shared = condition["enzyme"].transform("nunique") > 1
    if not shared.any():
        return _not_judged("no two enzyme levels of the lot have clear rates at equal substrate")
    order = _order_in_substrate(rates)
    chosen: pd.DataFrame = rates.loc[shared]
    order = order[shared.to_numpy()]
    rates = chosen
    value = rates["v0_um_per_s"].to_numpy(dtype=float)
    mean_um = rates["mean_substrate_um"].to_numpy(dtype=float)
    moved = np.where(mean_um > 0, np.log(mean_um / rates["substrate_um"].to_numpy(dtype=float)), 0.0)
    y = np.log(value / rates["enzyme"].to_numpy(dtype=float)) - order * moved
    variance = (rates["v0_se_um_per_s"].to_numpy(dtype=float) / value) ** 2
    which = rates.groupby(CONDITION, dropna=False).ngroup().to_numpy()
    level, place = np.unique(rates["enzyme"].to_numpy(dtype=float), return_inverse=True)
    conditions = _one_hot(which)
    factors = _one_hot(place)[:, 1:]
    design = np.hstack([conditions, factors])
    degrees = y.size - int(np.linalg.matrix_rank(design))
    if degrees < 1:
        return _not_judged("the lot has no replicate or further substrate level to tell scatter by")
    weight = _weights(design, y, variance, degrees)
    factor, full = _least_squares(design, y, weight)
    _, alike = _least_squares(conditions, y, weight)
    f_value = (alike - full) / (level.size - 1) / max(full / degrees, 1.0)
    p_value = float(f_distribution.sf(f_value, level.size - 1, degrees))
    log_factor = np.concatenate([[0.0], factor[conditions.shape[1] :]])
    mass = np.bincount(place, weight)
    elsewhere = (np.sum(mass * log_factor) - mass * log_factor) / (np.sum(mass) - mass)
    departure = np.expm1(log_factor - elsewhere)
    size = np.abs(log_factor - elsewhere)
    # Two levels depart from each other alike: the higher one is named.
    most = int(np.flatnonzero(size >= size.max() * (1.0 - 1e-9))[-1])
    unit = rates["enzyme_unit"].iloc[0]
    return "", float(departure[most]), p_value, float(level[most]), unit, level.size


def _order_in_substrate(rates: pd.DataFrame) -> np.ndarray:
    """dlnv/dlnS of each rate from the mean rates per enzyme of neighbouring levels; 0 with one level."""
    specific = pd.Series(np.log(rates["v0_um_per_s"] / rates["enzyme"]), index=rates.index)
    order = np.zeros(len(rates))
    for _, rows in specific.groupby([rates["modulator"], rates["modulator_um"]], dropna=False):
        substrate = np.log(rates.loc[rows.index, "substrate_um"])
        means = rows.groupby(substrate).mean()
        if len(means) < 2:
            continue
        slopes = np.gradient(means.to_numpy(), means.index.to_numpy())
        at = dict(zip(means.index, np.clip(slopes, 0.0, HIGHEST_ORDER), strict=True))
        order[rows.index.to_numpy()] = substrate.map(at).to_numpy()
    return order


def _weights(design: np.ndarray, y: np.ndarray, variance: np.ndarray, degrees: int) -> np.ndarray:
    """One over the variance, with the scatter between wells that makes residuals as large as expected."""
    floor = max(1e-12, 1e-6 * float(np.max(variance)))
    low, high = 0.0, _LARGEST_CV**2

    def excess(scatter: float) -> bool:
        return _least_squares(design, y, 1.0 / (np.maximum(variance, floor) + scatter))[1] > degrees

    if excess(low):
        for _ in range(_BISECTIONS):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if excess(middle) else (low, middle)
    return np.asarray(1.0 / (np.maximum(variance, floor) + low))


def _least_squares(design: np.ndarray, y: np.ndarray, weight: np.ndarray) -> tuple[np.ndarray, float]:
    root = np.sqrt(weight)
    solution: np.ndarray = np.linalg.lstsq(design * root[:, None], y * root, rcond=None)[0]
    return solution, float(np.sum(weight * (y - design @ solution) ** 2))


def _one_hot(which: np.ndarray) -> np.ndarray:
    found: np.ndarray = np.equal(which[:, None], np.arange(int(which.max()) + 1)).astype(float)
    return found


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect rates in proportion to the enzyme, or a departure that chance explains."""
    from checks import expectations as expect

    bounds = (number(limits, NAME, "limit"), 1.0 - number(limits, NAME, "p_limit"))
    return [expect.not_both(NAME, ("departure", "certainty"), bounds, rule="departure")]


def measure(row: Row, limits: Limits) -> Measure:
    """Size of the departure against its limit."""
    departure = known_or_none(row["departure"])
    return Measure(None if departure is None else abs(departure), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """Which enzyme level departs, by how much, and how likely chance is."""
    departure = float(row["departure"])
    measured, limit = beside(abs(departure), number(limits, NAME, "limit"), 100)
    unit = {"nmol/L": "nM", "ng/mL": "ng/mL"}[row["unit"]]
    return (
        f"At {plain(float(row['level']))} {unit} of enzyme the lot runs {measured} % "
        f"{'above' if departure > 0 else 'below'} the line through zero of its other enzyme levels (limit "
        f"{limit} %): chance does that with probability {float(row['p_value']):.2g} (limit "
        f"{plain(number(limits, NAME, 'p_limit'))})."
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
            0.10,
            "1",
            "Relative departure of an enzyme level from the line through zero of the others",
            "common practice, no source",
            low=0.001,
            high=10.0,
        ),
        Setting(
            "p_limit",
            0.01,
            "1",
            "Probability below which chance does not explain the departure",
            "common practice, no source",
            low=1e-12,
            high=0.5,
        ),
    ),
    text=__doc__,
    needs={"lot": ("departure", "p_value")},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
