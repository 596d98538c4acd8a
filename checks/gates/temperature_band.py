"""Holds a plate read whose temperature left the band round that of the assay.

Purpose: rates change by some 7 % per kelvin where they double in 10 K. Constants from a plate that was warmer
or colder than the assay says are constants of other conditions, and neighbouring reads of one that drifted
are not of one rate.

Formula: max(|T_high - T|, |T_low - T|) > limit, with T_low and T_high the lowest and highest temperature that
the instrument reported during the read and T the assay's temperature_c. An assay that states no temperature
demands none: not applicable.

Source: temperature among the conditions to be reported: STRENDA guidelines, N. Swainston et al., FEBS J. 285
(2018) 2193-2204, doi:10.1111/febs.14427.

Default: 0.5 K, about 3.5 % of a rate that doubles in 10 K (common practice, no source).
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

NAME = "temperature_band"
DIGITS = 9
"""Reported tenths of a degree are no binary fractions: an excursion of just the limit must not breach it."""


def metrics(data: GateInput) -> pd.DataFrame:
    """Largest excursion from the assay's temperature, of plate reads with enzyme whose assay states one."""
    stated = {recipe: assay.conditions.temperature_c for recipe, assay in data.assays.items()}
    demanded = data.analyses[["analysis_id"]].assign(
        assay_c=data.analyses["recipe_id"].map(stated).astype(float)
    )
    with_rates = data.wells.loc[data.wells["role"].isin(ENZYME_ROLES), "analysis_id"]
    plates = demanded[demanded["analysis_id"].isin(with_rates)].dropna(subset="assay_c")
    reported = data.plate_reads[["analysis_id", "temperature_low_c", "temperature_high_c"]]
    plates = plates.merge(reported, on="analysis_id", how="left", validate="1:1")
    low, high, assay_c = (
        plates[name].to_numpy(dtype=float) for name in ("temperature_low_c", "temperature_high_c", "assay_c")
    )
    excursion = np.fmax(np.abs(low - assay_c), np.abs(high - assay_c)).round(DIGITS)
    why = "the assay states a temperature, and the export reports none"
    return metrics_frame(
        "plate_read",
        plates,
        np.where(np.isfinite(excursion), "", why),
        excursion_k=excursion,
        low_c=np.fmin(low, high),
        high_c=np.fmax(low, high),
        assay_c=assay_c,
    )


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect a temperature within the band."""
    from checks import expectations as expect

    return [expect.at_most(NAME, "excursion_k", number(limits, NAME, "limit"), rule="excursion")]


def measure(row: Row, limits: Limits) -> Measure:
    """Excursion against its limit."""
    return Measure(known_or_none(row["excursion_k"]), number(limits, NAME, "limit"), "K")


def sentence(row: Row, limits: Limits) -> str:
    """Where the temperature was, and what that makes of the constants."""
    measured, limit = beside(float(row["excursion_k"]), number(limits, NAME, "limit"))
    return (
        f"The temperature went from {row['low_c']:.6g} to {row['high_c']:.6g} °C, up to {measured} K from "
        f"the assay's {row['assay_c']:.6g} °C (limit {limit} K): the rates are those of another temperature."
    )


GATE = Gate(
    name=NAME,
    subjects=("plate_read",),
    phase="wells",
    severity="hold",
    unassessed="clear",
    settings=(
        Setting(
            "limit",
            0.5,
            "K",
            "Kelvin by which the reported temperature may differ from the assay's",
            "about 3.5 % of a rate that doubles in 10 K; common practice, no source",
            low=0.01,
            high=20.0,
        ),
    ),
    text=__doc__,
    needs={"plate_read": ("excursion_k",)},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
