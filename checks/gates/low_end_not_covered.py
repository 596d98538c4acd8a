"""Holds a series whose lowest substrate already lies above K.

Purpose: K is where the rate turns from rising to flat. Where every rate lies on the flat side, the fit has
seen no bend: any K well below the lowest substrate would do nearly as well.

Formula: r = S_min / K > limit, with S_min the lowest clear substrate and K = Km or K0.5. The rate at S_min
is r^n / (1 + r^n) of Vmax, n the Hill coefficient or 1: half of it at r = 1, for both laws.

Source: A. Cornish-Bowden, Fundamentals of Enzyme Kinetics, 4th ed., Wiley-Blackwell 2012, ISBN
978-3-527-33074-4 (levels should lie on both sides of Km).

Default: 1, so that at least one level lies at or below K (common practice).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.chosen_fits import half_saturation
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
from checks.gates.wording import beside

NAME = "low_end_not_covered"


def metrics(data: GateInput) -> pd.DataFrame:
    """Lowest clear substrate over K of every series."""
    if data.series is None or data.estimates is None:
        raise ValueError(f"{NAME} judges fits: it needs series and estimates")
    series = data.series.reset_index(drop=True)
    half = half_saturation(series, data.estimates)
    lowest = series["lowest_substrate_um"].to_numpy(dtype=float)
    ratio = lowest / half["k_um"].to_numpy(dtype=float)
    return metrics_frame(
        "series",
        series,
        half["reason"].to_numpy(dtype=object),
        ratio=np.where(half["reason"] == "", ratio, np.nan),
        lowest_substrate_um=lowest,
        k_name=half["k_name"].to_numpy(dtype=object),
        hill_n=half["hill_n"].to_numpy(dtype=float),
    )


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect a substrate low enough."""
    from checks import expectations as expect

    return [expect.at_most(NAME, "ratio", number(limits, NAME, "limit"), rule="ratio")]


def measure(row: Row, limits: Limits) -> Measure:
    """Lowest substrate over K against its limit."""
    return Measure(known_or_none(row["ratio"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """How high the series begins, and what that leaves unknown."""
    ratio = float(row["ratio"])
    measured, limit = beside(ratio, number(limits, NAME, "limit"))
    powered = ratio ** (known_or_none(row["hill_n"]) or 1.0)
    return (
        f"The lowest clear substrate, {row['lowest_substrate_um']:.6g} µM, is {measured} times "
        f"{row['k_name']} (limit {limit}): every level runs at {powered / (1 + powered) * 100:.0f} % of Vmax "
        f"or more, so {row['k_name']} rests on extrapolation."
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
            1.0,
            "1",
            "Highest allowed lowest substrate over K",
            "one level at or below K; common practice",
            low=0.001,
            high=1000.0,
        ),
    ),
    text=__doc__,
    needs={"series": ("ratio",)},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
