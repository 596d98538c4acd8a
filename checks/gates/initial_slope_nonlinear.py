"""Holds a well whose curve is not straight where its initial rate is read.

Purpose: a rate is a slope only where the curve is a line. A bend that loss of substrate does not explain
has another cause (lag, burst, loss of activity, product inhibition, a bubble), and the reviewer must see it.

Formula, with c the relative change of slope from start to end of a stretch, from its quadratic term and
beyond what loss of substrate explains, and t its t value; the first rule that is breached is told:

- shape: the curve begins with a lag or a burst, where hold_lag_and_burst. A lag is looked for by its own
  trace too, an exponential beside start and slope: a parabola sees little of one that ends early.
- window: |c| > limit and |t| >= t_limit over the chosen window. The window is the longest straight one, so
  this says that even the shortest one bends.
- early: the same over all reads before the conversion limit, whatever the window; not for a lag or burst,
  which is the shape rule's.
- falling: the slope falls so within the first half or quarter of those reads only.

A lag or burst is held even though the rate was taken clear of it: whether the enzyme was then at its steady
state is for a person to say. A site whose enzyme always starts with a lag turns that off.

Source: quadratic term and its t test: N. R. Draper, H. Smith, Applied Regression Analysis, 3rd ed., Wiley
1998, doi:10.1002/9781118625590. Lag and burst: C. Frieden, Annu. Rev. Biochem. 48 (1979) 471-489,
doi:10.1146/annurev.bi.48.070179.002351.

Default: 10 %, as much as the conversion limit lets a first-order curve bend (common practice); t of 4,
because a well is tried on several stretches: chance alone then passes it in fewer than 1 well of 1000.
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
from checks.gates.wording import beside, plain

NAME = "initial_slope_nonlinear"
STARTS = ("lag", "burst")


def metrics(data: GateInput) -> pd.DataFrame:
    """Change of slope over the window and over the early reads, with t values, and the curve's shape."""
    wells = data.wells_with_rates(ENZYME_ROLES, with_substrate=True)
    change = wells["slope_change"].to_numpy(dtype=float)
    early = wells["early_slope_change"].to_numpy(dtype=float)
    reason = np.select(
        [(wells["shape"] == "unread").to_numpy(), ~np.isfinite(change), ~np.isfinite(early)],
        [NO_RATE, "the window has too few reads to show a bend", "too few reads before the conversion limit"],
        default="",
    )
    starts = wells["shape"].isin(STARTS).to_numpy()
    return metrics_frame(
        "well",
        wells,
        reason,
        slope_change=change,
        slope_change_t=wells["slope_change_t"].to_numpy(dtype=float),
        early_slope_change=early,
        early_slope_change_t=wells["early_slope_change_t"].to_numpy(dtype=float),
        # A lag or burst that the site accepts must not be held as a bend instead.
        early_bend=np.where(starts & np.isfinite(early), 0.0, early),
        shape=wells["shape"].to_numpy(dtype=object),
        lag_s=wells["lag_s"].to_numpy(dtype=float),
    )


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect no lag or burst, a straight window, and no early bend but the substrate's."""
    from checks import expectations as expect

    both = (number(limits, NAME, "limit"), number(limits, NAME, "t_limit"))
    rules = [
        expect.not_both(NAME, ("slope_change", "slope_change_t"), both, rule="window"),
        expect.not_both(NAME, ("early_bend", "early_slope_change_t"), both, rule="early"),
        expect.none_of(NAME, "shape", ("falling",), rule="falling"),
    ]
    if limits[NAME]["hold_lag_and_burst"]:
        rules.insert(0, expect.none_of(NAME, "shape", STARTS, rule="shape"))
    return rules


def measure(row: Row, limits: Limits) -> Measure:
    """Change of slope that counts against the limit; for a lag, how long it lasts."""
    limit = number(limits, NAME, "limit")
    if row["rule"] == "shape" and row["shape"] == "lag":
        return Measure(known_or_none(row["lag_s"]), 0.0, "s")
    column = "slope_change" if row["rule"] == "window" else "early_slope_change"
    return Measure(known_or_none(abs(row[column])), limit, "1")


def sentence(row: Row, limits: Limits) -> str:
    """How the curve bends, and what that says of the rate."""
    limit, t_limit = number(limits, NAME, "limit"), number(limits, NAME, "t_limit")
    rule = row["rule"]
    if rule == "shape" and row["shape"] == "lag":
        lag = known_or_none(row["lag_s"])
        length = "A lag" if lag is None else f"A lag of {lag:.6g} s"
        return (
            f"{length} comes before the straight part of the curve (limit 0 s): the rate was taken after it."
        )
    column = "slope_change" if rule == "window" else "early_slope_change"
    change, t_value = float(row[column]), abs(float(row[f"{column}_t"]))
    measured, limit_text = beside(abs(change), limit, 100)
    limits_text = f"limit {limit_text} %; t {t_value:.1f}, limit {plain(t_limit)}"
    if rule == "shape":
        return (
            f"The curve begins with a burst: its slope changes by {measured} % of its mean over the reads "
            f"before the conversion limit ({limits_text}). The rate may be the burst's, not the steady "
            "state's."
        )
    if rule == "window":
        return (
            f"The slope changes by {measured} % of its mean over the window ({limits_text}): even the "
            "shortest usable window is not straight, so this is no initial rate."
        )
    if rule == "falling":
        return (
            "The slope falls at the start of the curve more than loss of substrate explains; over all reads "
            f"before the conversion limit it changes by {measured} % of its mean ({limits_text}). "
            "See the first reads."
        )
    way = "rises" if change > 0 else "falls"
    why = "a slow start" if change > 0 else "loss of activity or a product that inhibits"
    return (
        f"The slope {way} by {measured} % of its mean over the reads before the conversion limit, beyond "
        f"what loss of substrate explains ({limits_text}): there is another reason, such as {why}."
    )


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
            4.0,
            "1",
            "t value from which a change of slope is significant",
            "a well is tried on several stretches; chance alone then passes it in fewer than 1 well of 1000",
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
    needs={"well": ("slope_change", "slope_change_t", "early_slope_change", "early_slope_change_t")},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
