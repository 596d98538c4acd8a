"""Holds a series whose whole curves tell other constants than its initial rates.

Purpose: initial rates see the first few per cent of a reaction, the integrated rate law all of it. Both
estimate the same Km and Vmax. Where they disagree beyond their joint uncertainty, something sets in during
the read: loss of activity, inhibition by product, a side reaction, or a baseline that drifts.

Formula: p < limit, with p the chance that the two ratios Km(whole curves) / Km(initial rates) and Vmax / Vmax
lie this far from 1 together, by the covariance of their logarithms. The integrated law is that of
Michaelis and Menten: series for which another law was chosen have no second estimate of the same constants:
not applicable.

Source: integrated rate law: S. Schnell, C. Mendoza, J. Theor. Biol. 187 (1997) 207-212,
doi:10.1006/jtbi.1997.0425; joint regions: D. M. Bates, D. G. Watts, Nonlinear Regression Analysis and Its
Applications, Wiley 1988, doi:10.1002/9780470316757.

Default: 0.01: a series that is what its law says is held once in a hundred.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.chosen_fits import not_fitted, of_series
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
from checks.gates.wording import chance, plain

NAME = "initial_vs_full_curve"
INTEGRATED_LAW = "michaelis_menten"
RATIOS = ("km_ratio", "km_ratio_low", "km_ratio_high", "vmax_ratio")


def metrics(data: GateInput) -> pd.DataFrame:
    """p value of the disagreement of the two estimates, of series whose law has an integrated form here."""
    if data.series is None or data.comparisons is None:
        raise ValueError(f"{NAME} judges fits: it needs series and comparisons")
    compared = data.series["series_id"].isin(data.comparisons["series_id"])
    applies = compared | data.series["refusal"].notna() | (data.series["law"] == INTEGRATED_LAW)
    series = data.series[applies].reset_index(drop=True)
    values = {
        name: of_series(data.comparisons, series, name).to_numpy(dtype=float, na_value=np.nan)
        for name in ("p_value", *RATIOS)
    }
    why = not_fitted(series)
    reason = np.select(
        [why != "", ~compared[applies].to_numpy(), np.isnan(values["p_value"])],
        [
            why,
            "the whole curves gave no estimate to compare the initial rates with",
            "the uncertainty of the two estimates together is not known",
        ],
        default="",
    )
    values["p_value"] = np.where(reason == "", values["p_value"], np.nan)
    return metrics_frame("series", series, reason, **values)


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect two estimates that chance may tell apart."""
    from checks import expectations as expect

    return [expect.at_least(NAME, "p_value", number(limits, NAME, "limit"), rule="p_value")]


def measure(row: Row, limits: Limits) -> Measure:
    """p value against its limit."""
    return Measure(known_or_none(row["p_value"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """How far the two lie apart, and what that says."""
    limit = number(limits, NAME, "limit")
    low, high = known_or_none(row["km_ratio_low"]), known_or_none(row["km_ratio_high"])
    interval = f"{'open' if low is None else f'{low:.2f}'} to {'open' if high is None else f'{high:.2f}'}"
    return (
        f"Whole curves give {row['km_ratio']:.2f} times the Km of the initial rates (95 % {interval}) and "
        f"{row['vmax_ratio']:.2f} times their Vmax: if both were right, that has a probability of "
        f"{chance(float(row['p_value']), limit)} (limit {plain(limit)}). Something changes during the read."
    )


GATE = Gate(
    name=NAME,
    subjects=("series",),
    phase="series",
    severity="hold",
    unassessed="clear",
    settings=(
        Setting(
            "limit",
            0.01,
            "1",
            "p value below which whole curves and initial rates are taken to disagree",
            "a series that is what its law says is held once in a hundred",
            low=1e-9,
            high=0.5,
        ),
    ),
    text=__doc__,
    needs={"series": ("p_value",)},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
