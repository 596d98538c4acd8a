"""Holds a series whose rates do not follow the law that was fitted to them.

Purpose: constants mean what their law means. Where the curve misses the rates by more than replicates
scatter, or lies above them over one stretch of substrate and below over another, it is the wrong law or the
rates of some levels are wrong, and intervals around its constants are too narrow.

Formula: p < limit, with p twice the smaller of two p values (Bonferroni), be it the only one known, for it
is the rates themselves that leave one untold:

- lack of fit: F test of the means of replicates about the curve against the scatter of replicates;
- runs: exact chance of so few runs of residuals of one sign, in order of substrate.

Source: lack of fit: N. R. Draper, H. Smith, Applied Regression Analysis, 3rd ed., Wiley 1998,
doi:10.1002/9781118625590, section 2.1; runs: A. Wald, J. Wolfowitz, Ann. Math. Stat. 11 (1940) 147-162,
doi:10.1214/aoms/1177731909.

Default: 0.01 for both tests together: a series that follows its law is held once in a hundred.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.chosen_fits import fits_that_count, not_fitted, of_series
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

NAME = "fit_misfit"
TESTS = 2


def metrics(data: GateInput) -> pd.DataFrame:
    """p value of misfit of every series, from the tests that its fit allows."""
    if data.series is None or data.fits is None:
        raise ValueError(f"{NAME} judges fits: it needs series and fits")
    series = data.series.reset_index(drop=True)
    fits = fits_that_count(data.fits)
    lack, runs = (
        of_series(fits, series, name).to_numpy(dtype=float, na_value=np.nan)
        for name in ("lack_of_fit_p", "runs_p")
    )
    p_value = np.minimum(np.fmin(lack, runs) * TESTS, 1.0)
    why = not_fitted(series)
    untold = "the series has neither replicates nor levels enough to show whether it follows its law"
    reason = np.where((why == "") & np.isnan(p_value), untold, why)
    return metrics_frame(
        "series",
        series,
        reason,
        p_value=np.where(reason == "", p_value, np.nan),
        lack_of_fit_p=lack,
        runs_p=runs,
        law=of_series(fits, series, "law").to_numpy(dtype=object),
    )


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect a misfit that chance explains."""
    from checks import expectations as expect

    return [expect.at_least(NAME, "p_value", number(limits, NAME, "limit"), rule="p_value")]


def measure(row: Row, limits: Limits) -> Measure:
    """p value against its limit."""
    return Measure(known_or_none(row["p_value"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """Which test the curve fails, by how much, and what that makes of its constants."""
    limit = number(limits, NAME, "limit")
    lack, runs = known_or_none(row["lack_of_fit_p"]), known_or_none(row["runs_p"])
    law = str(row["law"]).replace("_", " ")
    by_lack = lack is not None and (runs is None or lack <= runs)
    how = (
        "misses the means of replicates by more than these scatter"
        if by_lack
        else "lies above its rates over one stretch of substrate and below over another"
    )
    return (
        f"The curve ({law}) {how}: chance does that with a probability of "
        f"{chance(float(row['p_value']), limit)}, two tests allowed for (limit {plain(limit)}). "
        "Another law, or wrong rates at some level; the intervals of its constants are too narrow."
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
            "p value, over both tests, below which a curve is taken to miss its rates",
            "a series that follows its law is held once in a hundred",
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
