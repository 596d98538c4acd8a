"""Holds a well whose rate does not stand out of the uncertainty of its blank.

Purpose: a rate is what is left after the blank's slope is taken away. Where it is no larger than what that
slope may be off by, it may be no enzyme at all, and a fit takes it for one.

Formula: r = v / SE(blank slope) < limit, with v the rate after the blank is subtracted and the standard error
that of the slope of the matching blanks over the well's window, differences between blanks included. A rate
of 0 or less is below any limit. Wells without substrate have no enzyme rate to detect: not applicable.
A plate without blanks gets one finding, not assessed, for the plate read, not one for each of its wells.

Source: detection limits: L. A. Currie, Pure Appl. Chem. 67 (1995) 1699-1723, doi:10.1351/pac199567101699.

Default: 3, the 3.3 standard deviations of the source as they are usually rounded. An active well at an eighth
of Km stands some 20 to 50 standard errors above ordinary blanks; it takes a dead well or a wandering blank to
fall below 3.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.gate import (
    ENZYME_ROLES,
    NO_RATE,
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

NAME = "below_detection"


def metrics(data: GateInput) -> pd.DataFrame:
    """Rate over the blank's standard error, of wells with substrate on plates with blanks."""
    wells = data.wells_with_rates(ENZYME_ROLES, with_substrate=True)
    has_blank = wells["analysis_id"].isin(data.wells.loc[data.wells["role"] == "blank", "analysis_id"])
    bare = wells.loc[~has_blank, ["analysis_id"]].drop_duplicates(ignore_index=True)
    wells = wells[has_blank].reset_index(drop=True)
    rate = wells["v0_um_per_s"].to_numpy(dtype=float)
    error = wells["blank_rate_se_um_per_s"].to_numpy(dtype=float)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(rate == 0, 0.0, rate / error)
    reason = np.select(
        [~np.isfinite(rate), ~np.isfinite(error)],
        [NO_RATE, "no usable blank with a known error matches this well"],
        default="",
    )
    rows = metrics_frame(
        "well", wells, reason, ratio=np.where(reason == "", ratio, np.nan), rate_um_per_s=rate
    )
    plates = metrics_frame(
        "plate_read",
        bare,
        "the plate has no blank, so which of its rates stand out of one cannot be said",
    )
    return pd.concat([rows, plates], ignore_index=True)


def expectations(limits: Limits, subject: Subject) -> list[Any]:
    """Expect a rate well above the error of the blank; of plate reads nothing but that they have blanks."""
    from checks import expectations as expect

    if subject == "plate_read":
        return []
    return [expect.at_least(NAME, "ratio", number(limits, NAME, "limit"), rule="ratio")]


def measure(row: Row, limits: Limits) -> Measure:
    """Rate in standard errors of the blank's slope, against its limit."""
    return Measure(known_or_none(row["ratio"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """How little the rate is, and what that means."""
    measured, limit = beside(float(row["ratio"]), number(limits, NAME, "limit"))
    return (
        f"The rate, {row['rate_um_per_s']:.3g} µM/s, is {measured} standard errors of its blank's slope "
        f"(limit {limit}): it cannot be told from a well without enzyme."
    )


GATE = Gate(
    name=NAME,
    subjects=("well", "plate_read"),
    phase="wells",
    severity="hold",
    unassessed="clear",
    settings=(
        Setting(
            "limit",
            3.0,
            "1",
            "Fewest standard errors of the blank's slope that a rate must reach",
            "the usual detection limit",
            low=0.0,
            high=100.0,
        ),
    ),
    text=__doc__,
    needs={"well": ("ratio",), "plate_read": ()},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
