"""Holds a well whose curve is not straight where its initial rate is read.

Purpose: a rate is a slope only where the curve is a line. A bend that loss of substrate does not explain
has another cause (lag, burst, loss of activity, product inhibition, a bubble), and the reviewer must see it.

Formula, three rules, the first that is breached is told:
shape: the curve begins with a lag or a burst, where hold_lag_and_burst.
window: |c| > limit and |t| >= t_limit, with c the relative change of slope over the chosen window from
its quadratic term. The window is the longest straight one, so this says that even the shortest bends.
early: the same over all reads before the conversion limit, whatever the window, less what loss of
substrate explains: |c| - n X > limit for a falling slope, c > limit for a rising one, and |t| >= t_limit.
X is the conversion at the end of those reads; n = d ln v / d ln S is the order in substrate, read from the
rates of the series' neighbouring levels (1 well below Km, 0 at saturation, up to the Hill coefficient in a
cooperative enzyme): a slope falls by n X when a share X of the substrate is gone.

A lag or burst is held even though the rate was taken clear of it: whether the enzyme was then at its steady
state is for a person to say. A site whose enzyme always starts with a lag turns that off.

Source: quadratic term and its t test: N. R. Draper, H. Smith, Applied Regression Analysis, 3rd ed., Wiley
1998, doi:10.1002/9781118625590. Lag and burst: C. Frieden, Annu. Rev. Biochem. 48 (1979) 471-489,
doi:10.1146/annurev.bi.48.070179.002351.

Default: 10 %, which is as much as the conversion limit lets a first-order curve bend (common practice);
t of 3, which chance alone exceeds in 1 well of 370 where there are many reads.
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
from checks.gates.wording import beside, percent, plain

NAME = "initial_slope_nonlinear"
HIGHEST_ORDER = 5.0
"""No rate law in use has a steeper order in substrate; beyond it a measured order is noise."""
DEFAULT_ORDER = 1.0
"""Order where a series has one level only: the steepest of a hyperbolic law, so the most lenient."""


def metrics(data: GateInput) -> pd.DataFrame:
    """Change of slope over window and early reads, its t values, and what loss of substrate explains."""
    wells = data.wells_with_rates(ENZYME_ROLES, with_substrate=True)
    change = wells["slope_change"].to_numpy(dtype=float)
    early = wells["early_slope_change"].to_numpy(dtype=float)
    reason = np.select(
        [(wells["shape"] == "unread").to_numpy(), ~np.isfinite(change), ~np.isfinite(early)],
        [NO_RATE, "the window has too few reads to show a bend", "too few reads before the conversion limit"],
        default="",
    )
    return metrics_frame(
        "well",
        wells,
        reason,
        slope_change=change,
        slope_change_t=wells["slope_change_t"].to_numpy(dtype=float),
        early_slope_change=early,
        early_slope_change_t=wells["early_slope_change_t"].to_numpy(dtype=float),
        substrate_order=substrate_order(wells),
        read_conversion=_read_conversion(data, wells),
        shape=wells["shape"].to_numpy(dtype=object),
        lag_s=wells["lag_s"].to_numpy(dtype=float),
    )


def unexplained_change(change: Any, order: Any, read_conversion: Any, depletion_limit: float) -> Any:
    """Magnitude of a change of slope that loss of substrate does not explain.

    Parameters
    ----------
    change
        Relative change of slope over the reads before the conversion limit; negative where it falls.
    order
        Order in substrate, d ln v / d ln S.
    read_conversion
        Conversion expected at the end of the read; those reads end at `depletion_limit` at the latest.
    """
    explained = order * np.minimum(read_conversion, depletion_limit)
    return np.where(np.less(change, 0), np.maximum(-change - explained, 0), np.abs(change))


def substrate_order(wells: pd.DataFrame) -> np.ndarray:
    """Order in substrate at each well's level, d ln v / d ln S between the neighbouring levels of its series.

    Parameters
    ----------
    wells
        analysis_id, series_id, substrate_um, v0_um_per_s.

    Returns
    -------
    numpy.ndarray
        (W,) between 0 and `HIGHEST_ORDER`; `DEFAULT_ORDER` where no other level has a rate.
    """
    frame = pd.DataFrame(
        {
            "series": wells.groupby(["analysis_id", "series_id"], dropna=False).ngroup().to_numpy(),
            "substrate": wells["substrate_um"].to_numpy(dtype=float),
            "rate": wells["v0_um_per_s"].to_numpy(dtype=float),
        }
    )
    running = frame[frame["rate"] > 0]
    levels = running.groupby(["series", "substrate"])["rate"].median().reset_index()
    levels["log_s"], levels["log_v"] = np.log(levels["substrate"]), np.log(levels["rate"])
    by_series = levels.groupby("series")[["log_s", "log_v"]]
    here = levels[["log_s", "log_v"]]
    rise = by_series.shift(-1).fillna(here) - by_series.shift(1).fillna(here)
    with np.errstate(divide="ignore", invalid="ignore"):
        levels["order"] = rise["log_v"].to_numpy() / rise["log_s"].to_numpy()
    found = frame.merge(levels[["series", "substrate", "order"]], on=["series", "substrate"], how="left")
    return found["order"].fillna(DEFAULT_ORDER).clip(0, HIGHEST_ORDER).to_numpy(dtype=float)


def _read_conversion(data: GateInput, wells: pd.DataFrame) -> np.ndarray:
    """Conversion at the well's last read if it went on as over its window; unbounded where not known."""
    reads = data.reads
    last = np.full(len(reads.wells), np.nan)
    np.fmax.at(last, reads.code, reads.time_s)
    with np.errstate(divide="ignore", invalid="ignore"):
        ahead = reads.for_wells(last, wells) / wells["window_end_s"].to_numpy(dtype=float)
        conversion = wells["conversion"].to_numpy(dtype=float) * np.maximum(ahead, 1)
    return np.where(np.isnan(conversion), np.inf, np.maximum(conversion, 0))


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect no lag or burst, a straight window, and no early bend but the substrate's."""
    from checks import expectations as expect

    limit, t_limit = number(limits, NAME, "limit"), number(limits, NAME, "t_limit")
    rules = [
        expect.not_both(NAME, ("slope_change", "slope_change_t"), (limit, t_limit), rule="window"),
        expect.change_explained(
            NAME,
            ("early_slope_change", "early_slope_change_t", "substrate_order", "read_conversion"),
            limit=limit,
            t_limit=t_limit,
            depletion_limit=number(limits, "substrate_depletion", "limit"),
            rule="early",
        ),
    ]
    if limits[NAME]["hold_lag_and_burst"]:
        rules.insert(0, expect.none_of(NAME, "shape", ("lag", "burst"), rule="shape"))
    return rules


def measure(row: Row, limits: Limits) -> Measure:
    """Change of slope that counts against the limit; for a lag, how long it lasts."""
    limit = number(limits, NAME, "limit")
    if row["rule"] == "shape" and row["shape"] == "lag":
        return Measure(known_or_none(row["lag_s"]), 0.0, "s")
    if row["rule"] == "window":
        return Measure(known_or_none(abs(row["slope_change"])), limit, "1")
    if row["rule"] == "shape":
        return Measure(known_or_none(abs(row["early_slope_change"])), limit, "1")
    return Measure(known_or_none(_unexplained(row, limits)), limit, "1")


def sentence(row: Row, limits: Limits) -> str:
    """How the curve bends, and what that says of the rate."""
    limit, t_limit = number(limits, NAME, "limit"), number(limits, NAME, "t_limit")
    if row["rule"] == "shape" and row["shape"] == "lag":
        lag = known_or_none(row["lag_s"])
        length = "A lag" if lag is None else f"A lag of {lag:.6g} s"
        return (
            f"{length} comes before the straight part of the curve (limit 0 s): the rate was taken after it."
        )
    if row["rule"] == "shape":
        early = known_or_none(row["early_slope_change"])
        change = (
            "" if early is None else f": its slope changes by {percent(early)} (limit {plain(limit * 100)} %)"
        )
        return f"The curve begins with a burst{change}. The rate may be the burst's, not the steady state's."
    if row["rule"] == "window":
        measured, limit_text = beside(abs(row["slope_change"]), limit, 100)
        t_text = f"t {abs(row['slope_change_t']):.1f}, limit {plain(t_limit)}"
        return (
            f"The slope changes by {measured} % over the window (limit {limit_text} %; {t_text}): "
            "even the shortest usable window is not straight, so this is no initial rate."
        )
    measured, limit_text = beside(_unexplained(row, limits), limit, 100)
    early = float(row["early_slope_change"])
    t_text = f"t {abs(row['early_slope_change_t']):.1f}, limit {plain(t_limit)}"
    if early > 0:
        return (
            f"The slope rises by {measured} % over the reads before the conversion limit (limit {limit_text} %; "
            f"{t_text}): the reaction starts slowly, and the rate depends on where it is read."
        )
    return (
        f"The slope falls by {percent(-early)} over the reads before the conversion limit, {measured} % more than "
        f"loss of substrate explains (limit {limit_text} %; {t_text}): it has another reason, such as loss of "
        "activity or a product that inhibits."
    )


def _unexplained(row: Row, limits: Limits) -> float:
    depletion_limit = number(limits, "substrate_depletion", "limit")
    change, order, conversion = row["early_slope_change"], row["substrate_order"], row["read_conversion"]
    return float(unexplained_change(change, order, conversion, depletion_limit))


GATE = Gate(
    name=NAME,
    subjects=("well",),
    phase="wells",
    severity="hold",
    unassessed="held",
    settings=(
        Setting(
            "limit",
            0.10,
            "1",
            "Relative change of slope that counts as a bend; windows are kept below it too",
            "as much as the conversion limit lets a first-order curve bend; common practice, no source",
            low=0.001,
            high=2.0,
        ),
        Setting(
            "t_limit",
            3.0,
            "1",
            "t value from which a change of slope is significant",
            "chance alone exceeds it in 1 well of 370 where there are many reads",
            low=0.0,
            high=100.0,
        ),
        Setting(
            "hold_lag_and_burst",
            True,
            "",
            "Whether a curve that begins with a lag or a burst waits for a person",
            "whether the enzyme had reached its steady state is for a person to say",
        ),
    ),
    text=__doc__,
    needs={
        "well": (
            "slope_change",
            "slope_change_t",
            "early_slope_change",
            "early_slope_change_t",
            "substrate_order",
            "read_conversion",
        )
    },
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
