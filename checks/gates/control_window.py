"""Holds a plate read whose reference does not stand clear of its blanks.

Purpose: reference wells of one condition are the plate's own proof that enzyme can be told from no enzyme.
Where they scatter, are slow, or the blanks run, no rate of the plate read is worth much.

Formula: Z' = 1 - 3 (sd_reference + sd_blank) / |mean_reference - mean_blank| < limit, of raw rates (blank not
subtracted) over each well's own window. Reference wells: one lot, enzyme level, modulator and substrate
level, that with the highest substrate that has at least 3 wells; of several, the one with most wells. Blanks:
those at the same substrate level where there are at least 3, else all of the plate; blanks that enzyme alone
makes do not count.

Source: Z': Zhang, Chung and Oldenburg 1999 (doi:10.1177/108705719900400206).

Default: 0.5, where the source calls an assay excellent. From 3 wells a side Z' is itself uncertain: at 2 %
scatter it lies near 0.9, and chance hardly ever takes it below 0.5.
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
from checks.gates.wording import beside, counted, plain
from models.statistics.plate_quality import control_window

NAME = "control_window"
FEWEST_WELLS = 3
CONDITION = [
    "analysis_id",
    "lot",
    "enzyme_nm",
    "enzyme_ng_per_ml",
    "modulator",
    "modulator_um",
    "substrate_um",
]


def metrics(data: GateInput) -> pd.DataFrame:
    """Z' of each plate read that has enzyme, and what it was taken from."""
    with_enzyme = data.wells.loc[data.wells["role"].isin(ENZYME_ROLES), "analysis_id"]
    plates = data.analyses.loc[data.analyses["analysis_id"].isin(with_enzyme), ["analysis_id"]]
    plates = plates.reset_index(drop=True)
    wells = data.wells.reindex(columns=[*CONDITION, "well", "role"])
    wells = wells.merge(
        data.rates[["analysis_id", "well", "raw_rate_um_per_s"]], on=["analysis_id", "well"], how="left"
    )
    wells["plate"] = pd.Index(plates["analysis_id"]).get_indexer(wells["analysis_id"])
    rated = wells[wells["raw_rate_um_per_s"].notna() & (wells["plate"] >= 0)]
    reference = _one_condition(rated[(rated["role"] == "reference") & (rated["substrate_um"] > 0)])
    level = reference.groupby("plate")["substrate_um"].first().reindex(plates.index)
    blank = _matching_blanks(rated[rated["role"] == "blank"], level)
    both = pd.concat([reference.assign(side=True), blank.assign(side=False)])
    window = control_window(
        both["plate"].to_numpy(dtype=np.intp),
        both["side"].to_numpy(dtype=bool),
        both["raw_rate_um_per_s"].to_numpy(dtype=float),
        len(plates),
    )
    has = {
        role: plates["analysis_id"].isin(wells.loc[wells["role"] == role, "analysis_id"]).to_numpy()
        for role in ("reference", "blank")
    }
    reason = np.select(
        [
            ~has["reference"],
            ~has["blank"],
            window.reference_count < FEWEST_WELLS,
            window.blank_count < FEWEST_WELLS,
            ~np.isfinite(window.z_prime),
        ],
        [
            "the plate has no reference",
            "the plate has no blank",
            f"no condition of the reference has {FEWEST_WELLS} wells with a rate",
            f"fewer than {FEWEST_WELLS} blanks have a rate",
            "reference and blanks have the same mean rate",
        ],
        default="",
    )
    return metrics_frame(
        "plate_read",
        plates,
        reason,
        z_prime=np.where(reason == "", window.z_prime, np.nan),
        signal_to_blank=window.signal_to_blank,
        reference_mean=window.reference_mean,
        reference_sd=window.reference_sd,
        blank_mean=window.blank_mean,
        blank_sd=window.blank_sd,
        reference_count=window.reference_count,
        blank_count=window.blank_count,
        substrate_um=level.to_numpy(dtype=float),
    )


def _one_condition(reference: pd.DataFrame) -> pd.DataFrame:
    """Reference wells of the highest substrate level with enough replicates, by plate."""
    count = reference.groupby(CONDITION, dropna=False)["well"].transform("size")
    enough = reference.assign(count=count)[count >= FEWEST_WELLS]
    best = enough.sort_values(["substrate_um", "count"], ascending=False, kind="stable")
    best = best.drop_duplicates("plate")[CONDITION]
    chosen: pd.DataFrame = enough.merge(best, on=CONDITION)
    return chosen


def _matching_blanks(blanks: pd.DataFrame, level: pd.Series) -> pd.DataFrame:
    same = blanks["substrate_um"].to_numpy(dtype=float) == level.reindex(blanks["plate"]).to_numpy()
    enough = pd.Series(same).groupby(blanks["plate"].to_numpy()).transform("sum").to_numpy() >= FEWEST_WELLS
    matching: pd.DataFrame = blanks[same | ~enough]
    return matching


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect a control window wide enough."""
    from checks import expectations as expect

    return [expect.at_least(NAME, "z_prime", number(limits, NAME, "limit"), rule="z_prime")]


def measure(row: Row, limits: Limits) -> Measure:
    """Z' against its limit."""
    return Measure(known_or_none(row["z_prime"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """Z', and the means and scatter behind it."""
    measured, limit = beside(float(row["z_prime"]), number(limits, NAME, "limit"))
    reference, blank = (
        f"{float(row[f'{side}_mean']):.3g} ± {float(row[f'{side}_sd']):.2g} µM/s "
        f"({counted(row[f'{side}_count'], 'well')})"
        for side in ("reference", "blank")
    )
    return (
        f"Z′ of reference against blank is {measured} (limit {limit}): at "
        f"{plain(float(row['substrate_um']))} µM substrate "
        f"the reference runs at {reference}, the blanks at {blank}."
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
            "1",
            "Lowest Z′ of the reference against the blanks",
            "an excellent assay by Zhang, Chung and Oldenburg 1999",
            low=-10.0,
            high=1.0,
        ),
    ),
    text=__doc__,
    needs={"plate_read": ("z_prime",)},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
