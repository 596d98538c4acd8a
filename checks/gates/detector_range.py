"""Holds a well with reads past the detector's range, and voids it where they leave no rate.

Purpose: a read that overflowed or lies past the detector's linear limit says nothing of the product. Such
reads are left out of the window; the reviewer must know that, and that what is near them may be bent.

Formula: n = number of reads that overflowed or are past the assay's linear limit, from the first read to the
end of the window (all reads where there is no window); n > point_limit holds the well. Where there
is no window and any read was lost so, the well is void.

Source: common practice, no source.

Default: 0 reads. One lost read within the window already means that the signal ran at the detector's end.
Reads lost after the window's end cost nothing and are not counted.
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
    Row,
    Setting,
    Subject,
    known_or_none,
    metrics_frame,
    number,
)
from checks.gates.wording import counted, plain

NAME = "detector_range"


def metrics(data: GateInput) -> pd.DataFrame:
    """Lost reads up to the window's end, and lost reads of wells without a window."""
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
    )


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect no window lost to the detector, and no lost read before the window's end."""
    from checks import expectations as expect

    limit = number(limits, NAME, "point_limit")
    return [
        expect.at_most(NAME, "lost_without_window_count", 0.0, rule="no_window", severity="void"),
        expect.at_most(NAME, "lost_count", limit, rule="lost"),
    ]


def measure(row: Row, limits: Limits) -> Measure:
    """Lost reads against their limit."""
    if row["rule"] == "no_window":
        return Measure(known_or_none(row["lost_without_window_count"]), 0.0, "1")
    return Measure(known_or_none(row["lost_count"]), number(limits, NAME, "point_limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """How many reads were lost, and what that leaves."""
    if row["rule"] == "no_window":
        lost, read = row["lost_without_window_count"], row["read_count"]
        return (
            f"{lost:.0f} of {counted(read, 'read')} overflowed or lie past the detector's linear limit "
            "(limit 0): what is left makes no usable window, so the well has no rate."
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
