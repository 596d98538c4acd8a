"""Holds a well whose signal moves too much without enzyme, and a plate read whose blanks drift.

Purpose: a blank that moves stands for a reaction, an evaporation or a detector drift that is not the
enzyme's. It is subtracted, but a blank is never exactly like the well: the larger its share, the more of
that mismatch is left in the rate.

Formula: well: s = |blank rate| / max(|raw rate|, low_rate_share x highest |raw rate| of its series)
> limit, where |blank rate| >= t_limit standard errors. Plate read: |median slope of its blanks| in
signal per minute > plate_slope_limit, where plate_slope_on; median over its blanks of the distance between
the highest and the lowest residual of a blank about its own line, in signal, > plate_wander_limit, where
that is above 0: a baseline that wanders has no slope to subtract.

What it leaves alone, and why: (1) A blank whose slope does not stand out of its own noise is no drift:
its error is in the rate's error already. (2) A raw rate that does not stand out of its own noise has no
meaningful share: not assessed. (3) With little substrate the enzyme is slow and any blank is a large
share; wells slower than low_rate_share of the fastest of their series are judged as if they ran at
that, so that a blank of 1 % of the fastest rate never costs a series its low end. (4) A plate without
blanks gets one finding, not assessed, for the plate read, not one for each of its wells.

Source: common practice, no source.

Default: 10 % of the rate (common practice); 3 standard errors, because chance alone exceeds
that in 1 blank of 370. Slope and wander of a plate's blanks have no default that suits every signal: off
until a site sets them. A quiet blank of 60 reads wanders by some 4.6 standard deviations of a read.
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
from checks.gates.wording import beside, plain, significant

NAME = "blank_drift"
WANDER = "plate_wander"
FEWEST_READS = 3
SIGNIFICANT_RAW_T = 3.0
"""Standard errors below which a raw rate is lost in its noise."""


def metrics(data: GateInput) -> pd.DataFrame:
    """Rates and blanks of enzyme wells on plates with blanks; slope of the blanks of each plate read."""
    plates = _plate_metrics(data)
    with_blanks = set(data.wells.loc[data.wells["role"] == "blank", "analysis_id"])
    wells = data.wells_with_rates(ENZYME_ROLES, with_substrate=True)
    wells = wells[wells["analysis_id"].isin(with_blanks)].reset_index(drop=True)
    raw = wells["raw_rate_um_per_s"].abs().to_numpy(dtype=float)
    blank = wells["blank_rate_um_per_s"].abs().to_numpy(dtype=float)
    blank_se = wells["blank_rate_se_um_per_s"].to_numpy(dtype=float)
    raw_variance = wells["v0_se_um_per_s"].to_numpy(dtype=float) ** 2 - np.nan_to_num(blank_se) ** 2
    raw_t = _over(raw, np.sqrt(np.maximum(raw_variance, 0)))
    key = [wells["analysis_id"], wells["series_id"]]
    highest = pd.Series(raw).groupby(key, dropna=False).transform("max").to_numpy()
    reason = np.select(
        [~np.isfinite(raw), ~np.isfinite(blank), raw_t < SIGNIFICANT_RAW_T],
        [NO_RATE, "no usable blank matches this well", "its rate is lost in the noise of its own slope"],
        default="",
    )
    rows = metrics_frame(
        "well",
        wells,
        reason,
        raw_rate_um_per_s=raw,
        # A share of a rate that is noise must not be flagged beside being not assessed.
        blank_rate_um_per_s=np.where(reason == "", blank, np.nan),
        blank_t=_over(blank, blank_se),
        highest_rate_um_per_s=highest,
    )
    return pd.concat([rows, plates], ignore_index=True)


def blank_share(blank: Any, raw: Any, highest: Any, low_rate_share: float) -> Any:
    """Share of the rate that the blank explains.

    Parameters
    ----------
    blank, raw, highest
        Magnitudes of the blank's rate, the well's raw rate and the highest raw rate of its series, all in
        one unit; numbers, arrays or Series of one shape.
    low_rate_share
        Share of `highest` below which a well counts as if it ran at that.
    """
    return blank / np.maximum(raw, low_rate_share * highest)


def expectations(limits: Limits, subject: Subject) -> list[Any]:
    """Expect a small or insignificant blank in each well; blanks within the site's limits on each plate."""
    from checks import expectations as expect

    if subject == "plate_read":
        rules = []
        if limits[NAME]["plate_slope_on"]:
            limit = number(limits, NAME, "plate_slope_limit")
            rules.append(expect.at_most(NAME, "blank_slope_per_min", limit, rule="plate_slope"))
        if (limit := number(limits, NAME, "plate_wander_limit")) > 0:
            rules.append(expect.at_most(NAME, "blank_wander", limit, rule=WANDER))
        return rules
    return [
        expect.blank_share_within(
            NAME,
            ("blank_rate_um_per_s", "raw_rate_um_per_s", "highest_rate_um_per_s", "blank_t"),
            limit=number(limits, NAME, "limit"),
            t_limit=number(limits, NAME, "t_limit"),
            low_rate_share=number(limits, NAME, "low_rate_share"),
            rule="share",
        )
    ]


def measure(row: Row, limits: Limits) -> Measure:
    """Share of the rate, or slope or wander of the plate's blanks, against its limit."""
    if row["rule"] == WANDER:
        # What blanks are read in, which no unit describes.
        return Measure(known_or_none(row["blank_wander"]), number(limits, NAME, "plate_wander_limit"), "1")
    if row["subject"] == "plate_read":
        slope = known_or_none(row["blank_slope_per_min"])
        return Measure(slope, number(limits, NAME, "plate_slope_limit"), "1/min")
    return Measure(known_or_none(_row_share(row, limits)), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """What the blank does to the rate, or to the plate."""
    if row["rule"] == WANDER:
        wander_limit = number(limits, NAME, "plate_wander_limit")
        return (
            "The blanks of this plate wander by "
            f"{significant(float(row['blank_wander']), wander_limit)} signal about their line (limit "
            f"{plain(wander_limit)}): no slope takes that out of the rates."
        )
    if row["subject"] == "plate_read":
        limit_slope = number(limits, NAME, "plate_slope_limit")
        return (
            "The blanks of this plate move by "
            f"{significant(float(row['blank_slope_per_min']), limit_slope)} signal per min (limit "
            f"{plain(limit_slope)}): every rate of the plate read carries that."
        )
    measured, limit = beside(_row_share(row, limits), number(limits, NAME, "limit"), 100)
    floor = number(limits, NAME, "low_rate_share")
    slow = row["raw_rate_um_per_s"] < floor * row["highest_rate_um_per_s"]
    whose = f"{plain(floor * 100)} % of its series' highest rate" if slow else "this well's rate"
    return (
        f"The blank's slope is {measured} % of {whose} (limit {limit} %): what of it is not the same in this "
        "well is left in the rate."
    )


def _row_share(row: Row, limits: Limits) -> float:
    floor = number(limits, NAME, "low_rate_share")
    blank, raw, highest = (float(row[f"{name}_rate_um_per_s"]) for name in ("blank", "raw", "highest"))
    return float(blank_share(blank, raw, highest, floor))


def _over(value: np.ndarray, standard_error: np.ndarray) -> np.ndarray:
    """Value in standard errors; an unknown or zero error excuses no value but zero."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = value / standard_error
    return np.where(np.isnan(value) | np.isfinite(ratio), ratio, np.where(value > 0, np.inf, 0.0))


def _plate_metrics(data: GateInput) -> pd.DataFrame:
    """Median slope [signal/min] and wander [signal] of the blanks of each plate read with enzyme wells."""
    enzyme = data.wells["role"].isin(ENZYME_ROLES)
    plates = data.wells.loc[enzyme, ["analysis_id"]].drop_duplicates(ignore_index=True)
    blanks = data.wells.loc[data.wells["role"] == "blank", ["analysis_id", "well"]]
    plate_of_blank = blanks["analysis_id"].to_numpy()

    def median_of_blanks(values: np.ndarray) -> np.ndarray:
        of_blank = pd.Series(data.reads.for_wells(values, blanks)).groupby(plate_of_blank).median()
        return of_blank.reindex(plates["analysis_id"]).to_numpy(dtype=float)

    slopes, wanders = _signal_lines(data)
    slope = np.abs(median_of_blanks(slopes * 60))
    has_blank = plates["analysis_id"].isin(plate_of_blank).to_numpy()
    reason = np.select(
        [~has_blank, ~np.isfinite(slope)],
        [
            "the plate has no blank, so what share of its rates is not the enzyme's cannot be said",
            f"no blank of the plate has {FEWEST_READS} usable reads",
        ],
        default="",
    )
    return metrics_frame(
        "plate_read", plates, reason, blank_slope_per_min=slope, blank_wander=median_of_blanks(wanders)
    )


def _signal_lines(data: GateInput) -> tuple[np.ndarray, np.ndarray]:
    """Least-squares line through every read well's signal: slope [signal/s] and distance between its highest
    and lowest residual [signal]; NaN with too few reads."""
    reads = data.reads
    usable = np.isfinite(reads.signal) & ~reads.beyond & ~reads.missing & np.isfinite(reads.time_s)
    code, size = reads.code[usable], len(reads.wells)
    count = np.bincount(code, minlength=size)

    def total(values: np.ndarray) -> np.ndarray:
        return np.bincount(code, weights=values, minlength=size)

    time_s, signal = reads.time_s[usable], reads.signal[usable]
    with np.errstate(divide="ignore", invalid="ignore"):
        # About the well's own means: raw moments lose digits where times are large against the read.
        time_s = time_s - (total(time_s) / count)[code]
        signal = signal - (total(signal) / count)[code]
        slope = total(time_s * signal) / total(time_s**2)
    enough = count >= FEWEST_READS
    wander = np.full(size, np.nan)
    if code.size:
        residual = signal - slope[code] * time_s
        # Reads stand in the order of their wells, so each well's are one stretch.
        read_wells = np.flatnonzero(count)
        first = np.searchsorted(code, read_wells)
        wander[read_wells] = np.maximum.reduceat(residual, first) - np.minimum.reduceat(residual, first)
    return np.where(enough, slope, np.nan), np.where(enough, wander, np.nan)


GATE = Gate(
    name=NAME,
    subjects=("well", "plate_read"),
    phase="wells",
    severity="hold",
    unassessed="clear",
    settings=(
        Setting(
            "limit",
            0.10,
            "1",
            "Share of a well's rate that its blank may explain",
            "common practice, no source",
            low=0.001,
            high=10.0,
        ),
        Setting(
            "t_limit",
            3.0,
            "1",
            "Standard errors by which a blank's slope must differ from zero to count as drift",
            "chance alone exceeds it in 1 blank of 370",
            low=0.0,
            high=100.0,
        ),
        Setting(
            "low_rate_share",
            0.10,
            "1",
            "Wells slower than this share of their series' highest rate are judged as if they ran at it",
            "a blank of 1 % of the highest rate must not cost a series its low end; no source",
            low=0.0,
            high=1.0,
        ),
        Setting(
            "plate_slope_on",
            False,
            "",
            "Whether the slope of a plate's blanks is held against a limit",
            "no limit suits every signal",
        ),
        Setting(
            "plate_slope_limit",
            0.001,
            "1/min",
            "Signal per minute that the blanks of a plate may move, where that is on",
            "1 mAU/min, common practice for absorbance, no source",
            low=0.0,
        ),
        Setting(
            "plate_wander_limit",
            0.0,
            "1",
            "Signal by which the blanks of a plate may wander about their line; 0 for not judged",
            "no limit suits every signal",
            low=0.0,
        ),
    ),
    text=__doc__,
    needs={
        "well": ("blank_rate_um_per_s", "raw_rate_um_per_s", "highest_rate_um_per_s", "blank_t"),
        "plate_read": ("blank_slope_per_min", "blank_wander"),
    },
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
