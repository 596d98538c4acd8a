"""Holds a series with too much enzyme for rate equations that assume next to none.

Purpose: the rate laws count substrate as if none of it were bound to enzyme, and the rate as if it set in at
once. Both hold while there is far less enzyme than K and substrate together.

Formula: e = [E] / (K + [S]_min) > limit, with [E] the enzyme of the series, K = Km or K0.5, and [S]_min its
lowest clear substrate, where the condition is hardest to meet. Enzyme given by mass is converted by the
assay's molar mass (1 ng/mL over 1 g/mol is 1 umol/L); without one it has no molar concentration: not
applicable.

Source: L. A. Segel, M. Slemrod, SIAM Rev. 31 (1989) 446-477, doi:10.1137/1031091.

Default: 1 %, which reads the "much less than 1" of the source as a hundredth (common practice).
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

NAME = "steady_state_valid"


def metrics(data: GateInput) -> pd.DataFrame:
    """Enzyme over K plus lowest clear substrate, of series whose enzyme has a molar concentration."""
    if data.series is None or data.estimates is None:
        raise ValueError(f"{NAME} judges fits: it needs series and estimates")
    masses = {recipe: assay.molar_mass_g_per_mol for recipe, assay in data.assays.items()}
    recipes = data.analyses.set_index("analysis_id")["recipe_id"]
    molar_mass = data.series["analysis_id"].map(recipes).map(masses).to_numpy(dtype=float)
    by_amount = data.series["enzyme_nm"].to_numpy(dtype=float)
    by_mass = data.series["enzyme_ng_per_ml"].to_numpy(dtype=float)
    # 1 ng/mL is 1 ug/L, and 1 ug/L over 1 g/mol is 1 umol/L.
    enzyme_um = np.where(np.isfinite(by_amount), by_amount / 1000.0, by_mass / molar_mass)
    applies = np.isfinite(enzyme_um) | ~np.isfinite(by_mass)
    series = data.series[applies].reset_index(drop=True)
    enzyme_um = enzyme_um[applies]
    half = half_saturation(series, data.estimates)
    lowest = series["lowest_substrate_um"].to_numpy(dtype=float)
    k_um = half["k_um"].to_numpy(dtype=float)
    why = half["reason"].to_numpy(dtype=object)
    reason = np.where(
        np.isfinite(enzyme_um), why, "the plate map does not say how much enzyme the series holds"
    )
    return metrics_frame(
        "series",
        series,
        reason,
        enzyme_share=np.where(reason == "", enzyme_um / (k_um + lowest), np.nan),
        enzyme_nm=enzyme_um * 1000.0,
        sum_um=k_um + lowest,
        k_name=half["k_name"].to_numpy(dtype=object),
    )


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect little enzyme."""
    from checks import expectations as expect

    return [expect.at_most(NAME, "enzyme_share", number(limits, NAME, "limit"), rule="enzyme_share")]


def measure(row: Row, limits: Limits) -> Measure:
    """Enzyme over K plus substrate, against its limit."""
    return Measure(known_or_none(row["enzyme_share"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """How much enzyme there is, and what that does to the constants."""
    measured, limit = beside(float(row["enzyme_share"]), number(limits, NAME, "limit"), 100)
    return (
        f"The enzyme, {row['enzyme_nm']:.4g} nM, is {measured} % of {row['k_name']} plus the lowest clear "
        f"substrate, {row['sum_um']:.4g} µM together (limit {limit} %): so much substrate is bound to it "
        f"that {row['k_name']} comes out high."
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
            "Highest allowed enzyme over the sum of K and the lowest substrate",
            "a hundredth is much less than 1; common practice",
            low=1e-6,
            high=10.0,
        ),
    ),
    text=__doc__,
    needs={"series": ("enzyme_share",)},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
