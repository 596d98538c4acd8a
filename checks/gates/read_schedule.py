"""Holds a well that was not read as planned, and voids it where too little was read to give a rate.

Purpose: missing reads, gaps and times out of order change what a window means, and show that the instrument
or the robot did something else than planned.

Formula, the first rule that is breached is told:

- no_reads: no read at all, or all missing: void.
- too_few: some missing, and no usable window left: void.
- disorder: reads whose time is not after the read before > disorder_limit.
- missing: missing reads / reads > missing_limit.
- gap: longest time between neighbouring reads / their median > gap_limit.
- count: |reads - read_count of the assay's schedule| > count_tolerance, where the assay states it.
- interval: |median interval / interval_s of the schedule - 1| > interval_tolerance, where stated.

Missing reads have no part in intervals; overflowed ones do, they were made in time.

Source: common practice, no source.

Default: 5 % missing (3 of 60) leaves a line as it is; a gap of 2.5 intervals lets one missing read pass and
not two in a row; no time out of order; the count exactly and the interval to 5 %, where stated.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.gate import (
    READ_ROLES,
    Gate,
    GateInput,
    Limits,
    Measure,
    Reads,
    Row,
    Setting,
    Subject,
    known_or_none,
    metrics_frame,
    number,
)
from checks.gates.wording import beside, counted, plain

NAME = "read_schedule"
FEWEST_TIMED_READS = 3

_RULES: dict[str, tuple[str, str | None, str]] = {
    # rule: metric, setting of its limit (None is 0), unit
    "too_few": ("missing_without_window_count", None, "1"),
    "disorder": ("disorder_count", "disorder_limit", "1"),
    "missing": ("missing_share", "missing_limit", "1"),
    "gap": ("gap_ratio", "gap_limit", "1"),
    "count": ("count_difference", "count_tolerance", "1"),
    "interval": ("interval_departure", "interval_tolerance", "1"),
}


def metrics(data: GateInput) -> pd.DataFrame:
    """Counts of reads and their intervals, against the assay's schedule where it states one."""
    wells = data.wells_with_rates(READ_ROLES)
    reads = data.reads
    read = reads.for_wells(reads.count(np.ones_like(reads.missing)), wells, absent=0)
    missing = reads.for_wells(reads.count(reads.missing), wells, absent=0)
    interval, gap, disorder = (reads.for_wells(values, wells) for values in _intervals(reads))
    planned_count, planned_interval = _schedule(data, wells)
    unread = ((wells["shape"] == "unread") | ~(wells["window_point_count"] > 0)).to_numpy()
    made = read - missing
    timed = made >= FEWEST_TIMED_READS
    with np.errstate(divide="ignore", invalid="ignore"):
        missing_share = np.where(read > 0, missing / read, 1.0)
    reason = np.select(
        [made == 0, timed & np.isfinite(gap), timed],
        ["", "", "the reads have no times to judge intervals by"],
        default="fewer than three reads were made, so their intervals cannot be judged",
    )
    return metrics_frame(
        "well",
        wells,
        reason,
        read_count=read,
        made_count=made,
        missing_count=missing,
        missing_share=missing_share,
        missing_without_window_count=np.where(unread, missing, 0),
        interval_s=interval,
        gap_ratio=np.where(made == 0, np.inf, gap),
        disorder_count=np.where(made == 0, 0, disorder),
        planned_count=planned_count,
        count_difference=np.abs(read - planned_count),
        planned_interval_s=planned_interval,
        interval_departure=np.abs(interval / planned_interval - 1),
    )


def _intervals(reads: Reads) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Median interval [s], longest interval over the median, and reads not after the one before, by well."""
    made = ~reads.missing
    code, time_s = reads.code[made], reads.time_s[made]
    same = code[1:] == code[:-1]
    steps, owner = (time_s[1:] - time_s[:-1])[same], code[1:][same]
    wells = np.arange(len(reads.wells))
    forward = steps > 0
    by_well = pd.Series(steps[forward]).groupby(owner[forward])
    median = by_well.median().reindex(wells).to_numpy(dtype=float)
    longest = by_well.max().reindex(wells).to_numpy(dtype=float)
    disorder = np.bincount(owner[~forward], minlength=len(wells)).astype(float)
    return median, longest / median, disorder


def _schedule(data: GateInput, wells: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    """Planned reads and planned interval [s] of each well; NaN where its assay states none."""
    recipe = data.analyses.set_index("analysis_id")["recipe_id"]
    counts = {key: assay.schedule.read_count for key, assay in data.assays.items()}
    intervals = {key: assay.schedule.interval_s for key, assay in data.assays.items()}
    recipes = wells["analysis_id"].map(recipe)
    return (
        recipes.map(counts).astype(float).to_numpy(),
        recipes.map(intervals).astype(float).to_numpy(),
    )


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect reads at all, a usable window, and the schedule kept."""
    from checks import expectations as expect

    rules = [expect.at_least(NAME, "made_count", 1.0, rule="no_reads", severity="void")]
    for rule, (metric, setting, _) in _RULES.items():
        limit = 0.0 if setting is None else number(limits, NAME, setting)
        rules.append(
            expect.at_most(NAME, metric, limit, rule=rule, severity="void" if setting is None else "hold")
        )
    return rules


def measure(row: Row, limits: Limits) -> Measure:
    """What the breached rule measured, against its limit."""
    if row["rule"] == "no_reads":
        return Measure(known_or_none(row["made_count"]), 1.0, "1")
    metric, setting, unit = _RULES[row["rule"]]
    limit = 0.0 if setting is None else number(limits, NAME, setting)
    return Measure(known_or_none(row[metric]), limit, unit)


def sentence(row: Row, limits: Limits) -> str:
    """How the reads depart from the plan."""
    rule = row["rule"]
    if rule == "no_reads":
        how = (
            "no read of this well"
            if row["read_count"] == 0
            else f"all {counted(row['read_count'], 'read')} are missing"
        )
        return f"0 reads were made ({how}; limit at least 1): the well cannot be used."
    metric, setting, _ = _RULES[rule]
    limit = 0.0 if setting is None else number(limits, NAME, setting)
    value = float(row[metric])
    if rule == "too_few":
        return (
            f"{value:.0f} of {counted(row['read_count'], 'read')} are missing (limit 0 where no window is "
            "left): what was read makes no usable window, so the well has no rate."
        )
    if rule == "disorder":
        were = "is" if value == 1 else "are"
        late = f"{counted(value, 'read')} {were} not later than the read before (limit {plain(limit)})"
        return f"{late}: check the times."
    if rule == "missing":
        measured, limit_text = beside(value, limit, 100)
        return (
            f"{measured} % of the reads are missing ({row['missing_count']:.0f} of {row['read_count']:.0f}; "
            f"limit {limit_text} %): the rate rests on fewer reads than planned."
        )
    if rule == "gap":
        measured, limit_text = beside(value, limit)
        return (
            f"The longest gap between reads is {measured} intervals of {row['interval_s']:.6g} s "
            f"(limit {limit_text}): the curve was not seen in between."
        )
    if rule == "count":
        return (
            f"The well has {counted(row['read_count'], 'read')}, the assay's schedule "
            f"{row['planned_count']:.0f}: a difference of {value:.0f} (limit {plain(limit)})."
        )
    measured, limit_text = beside(value, limit, 100)
    return (
        f"Reads are {row['interval_s']:.6g} s apart, in the assay's schedule "
        f"{row['planned_interval_s']:.6g} s: {measured} % off (limit {limit_text} %)."
    )


GATE = Gate(
    name=NAME,
    subjects=("well",),
    phase="wells",
    severity="hold",
    unassessed="held",
    settings=(
        Setting(
            "missing_limit",
            0.05,
            "1",
            "Share of a well's reads that may be missing",
            "3 of 60 leave a line as it is; common practice, no source",
            high=1.0,
        ),
        Setting(
            "gap_limit",
            2.5,
            "1",
            "Longest time between neighbouring reads, in median intervals",
            "lets one missing read pass and not two in a row",
            low=1.0,
        ),
        Setting(
            "disorder_limit",
            0,
            "1",
            "Reads that may be no later than the read before",
            "time does not run backwards",
            high=10000,
        ),
        Setting(
            "count_tolerance",
            0,
            "1",
            "Reads by which a well may differ from the assay's schedule, where it states a count",
            "a stated count is meant",
            high=10000,
        ),
        Setting(
            "interval_tolerance",
            0.05,
            "1",
            "Share by which the median interval may differ from the assay's schedule, where it states one",
            "instruments keep their interval to a few per cent; common practice, no source",
            high=1.0,
        ),
    ),
    text=__doc__,
    needs={
        "well": ("made_count", "missing_share", "missing_without_window_count", "gap_ratio", "disorder_count")
    },
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
