"""Holds a well with reads past the detector's range, and voids it where they leave no rate.

Purpose: a read that overflowed or lies past the detector's linear limit says nothing of the product. Such
reads are left out of the window; the reviewer must know that, and that what is near them may be bent.

Formula: n = number of reads that overflowed or are past the assay's linear limit, from the first read to the
end of the window (all reads where there is no window); n > point_limit holds the well. Where there
is no window and any read was lost so, the well is void. Where every read after the window up to a lost one is
unusable, and conversion at that read, by the line through the window, is still below the limit of
substrate_depletion, it was the detector that ended the window: then the well is held as well.

Source: common practice, no source.

Default: 0 reads. One lost read within the window already means that the signal ran at the detector's end.
Where conversion ended the window, reads lost after it cost nothing and are not counted; a window that the
detector ended is shorter than planned, and its last reads were made where a detector begins to bend.
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

NAME = "detector_range"
CONVERSION = "substrate_depletion"
"""Gate whose limit ends a window."""


def metrics(data: GateInput) -> pd.DataFrame:
    """Lost reads up to the window's end, lost reads of wells without a window, and where one ended it."""
    wells = data.wells_with_rates(READ_ROLES)
    reads = data.reads
    unread = ((wells["shape"] == "unread") | ~(wells["window_point_count"] > 0)).to_numpy()
    last = np.where(unread, np.inf, wells["window_last_read"].to_numpy(dtype=float))
    key = pd.MultiIndex.from_frame(wells[["analysis_id", "well"]])
    end = pd.Series(last, index=key).reindex(pd.MultiIndex.from_frame(reads.wells)).to_numpy(dtype=float)
    within = reads.read_number <= np.nan_to_num(end, nan=np.inf)[reads.code]
    lost = reads.for_wells(reads.count(reads.beyond & within), wells, absent=0)
    all_lost = reads.for_wells(reads.count(reads.beyond), wells, absent=0)
    return metrics_frame(
        "well",
        wells,
        "",
        lost_count=lost,
        lost_without_window_count=np.where(unread, all_lost, 0),
        read_count=reads.for_wells(reads.count(within), wells, absent=0),
        cut_off_conversion=_cut_off_conversion(reads, wells, end, unread),
        cut_off_count=np.where(unread, 0, all_lost - lost),
    )


def _cut_off_conversion(reads: Reads, wells: pd.DataFrame, end: np.ndarray, unread: np.ndarray) -> np.ndarray:
    """Conversion at the lost read that follows the window, shape (wells,); NaN where none does."""
    after = reads.read_number > np.nan_to_num(end, nan=np.inf)[reads.code]
    next_s = np.full(len(reads.wells), np.inf)
    next_lost = np.zeros(len(reads.wells), dtype=bool)
    # Backwards, so that the first read after the window is the one that stays.
    follows = np.flatnonzero(after & ~reads.missing)[::-1]
    next_s[reads.code[follows]] = reads.time_s[follows]
    next_lost[reads.code[follows]] = reads.beyond[follows]
    lost_s = reads.for_wells(np.where(next_lost, next_s, np.nan), wells)
    start_s, end_s = (wells[name].to_numpy(dtype=float) for name in ("window_start_s", "window_end_s"))
    with np.errstate(divide="ignore", invalid="ignore"):
        conversion = wells["conversion"].to_numpy(dtype=float) * (lost_s - start_s) / (end_s - start_s)
    return np.where(unread, np.nan, conversion)


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect no window lost to the detector, no lost read before a window's end, and none that ends it."""
    from checks import expectations as expect

    limit = number(limits, NAME, "point_limit")
    return [
        expect.at_most(NAME, "lost_without_window_count", 0.0, rule="no_window", severity="void"),
        expect.at_most(NAME, "lost_count", limit, rule="lost"),
        expect.at_least(NAME, "cut_off_conversion", number(limits, CONVERSION, "limit"), rule="cut_off"),
    ]


def measure(row: Row, limits: Limits) -> Measure:
    """Lost reads against their limit."""
    if row["rule"] == "no_window":
        return Measure(known_or_none(row["lost_without_window_count"]), 0.0, "1")
    if row["rule"] == "cut_off":
        limit = number(limits, CONVERSION, "limit")
        return Measure(known_or_none(row["cut_off_conversion"]), limit, "1")
    return Measure(known_or_none(row["lost_count"]), number(limits, NAME, "point_limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """How many reads were lost, and what that leaves."""
    if row["rule"] == "no_window":
        lost, read = row["lost_without_window_count"], row["read_count"]
        return (
            f"{lost:.0f} of {counted(read, 'read')} overflowed or lie past the detector's linear limit "
            "(limit 0): what is left makes no usable window, so the well has no rate."
        )
    if row["rule"] == "cut_off":
        reached, allowed = beside(row["cut_off_conversion"], number(limits, CONVERSION, "limit"), 100.0)
        return (
            f"The detector ended the window: {counted(row['cut_off_count'], 'read')} after it overflowed or "
            f"lie past the linear limit, the first of them at {reached} % conversion (limit {allowed} %). "
            "The last reads before them may be bent, and the rate rests on fewer reads than planned."
        )
    limit = plain(number(limits, NAME, "point_limit"))
    return (
        f"{row['lost_count']:.0f} of {counted(row['read_count'], 'read')} up to the end of the window "
        f"overflowed or lie past the detector's linear limit (limit {limit}); they are left out of the rate."
    )


GATE = Gate(
    name=NAME,
    subjects=("well",),
    phase="wells",
    severity="hold",
    unassessed="held",
    settings=(
        Setting(
            "point_limit",
            0,
            "1",
            "Reads up to the window's end that may have overflowed or lie past the assay's linear limit",
            "one such read means that the signal ran at the detector's end",
            high=10000,
        ),
    ),
    text=__doc__,
    needs={"well": ("lost_count", "lost_without_window_count")},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
