"""Holds a series whose substrate does not reach high enough to fix Vmax and K.

Purpose: Vmax is what the rates tend to. Where the highest substrate is near K the fit guesses Vmax from the
bend alone, K with it, and both are badly known together, whatever the fit's own error says.

Formula, the first rule that is breached is told:

- ratio: r = (S_max / K)^n < limit, with S_max the highest clear substrate, K = Km (n = 1) or K0.5 with the
  Hill coefficient n. The rate at S_max is r / (1 + r) of Vmax: 75 % at r = 3, for both laws.
- open: the 95 % interval of Vmax or of K is open above, where hold_open_interval.

Source: A. Cornish-Bowden, Fundamentals of Enzyme Kinetics, 4th ed., Wiley-Blackwell 2012, ISBN
978-3-527-33074-4 (levels should reach well above Km); profile intervals that stay open: D. M. Bates, D. G.
Watts, Nonlinear Regression Analysis and Its Applications, Wiley 1988, doi:10.1002/9780470316757.

Default: 3, that is 75 % of Vmax (common practice). An interval that is open above says by itself
that the data do not bound the constant.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

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
from checks.gates.wording import beside, counted

NAME = "saturation_not_reached"
K_NAMES = {"km": "Km", "k_half": "K0.5"}
CONSTANT_NAMES = {**K_NAMES, "vmax": "Vmax"}
K_UNIT = "umol/L"


def metrics(data: GateInput) -> pd.DataFrame:
    """Highest clear substrate over K, and how many of Vmax and K are open above, of every series."""
    if data.series is None or data.estimates is None:
        raise ValueError("saturation_not_reached judges fits: it needs series and estimates")
    series = data.series.reset_index(drop=True)
    chosen = data.estimates[data.estimates["chosen"].astype(bool) & (data.estimates["wells"] == "clear")]

    def of(names: tuple[str, ...], column: str) -> pd.Series:
        rows = chosen[chosen["constant"].isin(names)].drop_duplicates("series_id").set_index("series_id")
        return rows[column].reindex(series["series_id"])

    k_um = of(tuple(K_NAMES), "value").to_numpy(dtype=float)
    k_name = of(tuple(K_NAMES), "constant").map(CONSTANT_NAMES).to_numpy(dtype=object)
    k_unit = of(tuple(K_NAMES), "unit").to_numpy(dtype=object)
    vmax = of(("vmax",), "value").to_numpy(dtype=float)
    hill_n = of(("hill_n",), "value").to_numpy(dtype=float)
    highest = series["highest_substrate_um"].to_numpy(dtype=float)
    k_open = np.isfinite(k_um) & ~np.isfinite(of(tuple(K_NAMES), "high").to_numpy(dtype=float))
    vmax_open = np.isfinite(vmax) & ~np.isfinite(of(("vmax",), "high").to_numpy(dtype=float))
    refusal = series["refusal"].astype(object)
    known = np.isfinite(k_um) & np.isfinite(vmax) & (k_um > 0) & (k_unit == K_UNIT) & (highest > 0)
    reason = np.where(
        refusal.notna(),
        "the series was not fitted: " + refusal.fillna("").astype(str),
        np.where(known, "", f"the law chosen has no Vmax with a K in {K_UNIT}"),
    )
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        ratio = (highest / k_um) ** np.where(np.isnan(hill_n), 1.0, hill_n)
    return metrics_frame(
        "series",
        series,
        reason,
        ratio=np.where(reason == "", ratio, np.nan),
        open_count=np.where(reason == "", k_open.astype(float) + vmax_open, np.nan),
        vmax_open=vmax_open,
        k_open=k_open,
        highest_substrate_um=highest,
        k_name=k_name,
        hill_n=hill_n,
    )


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect a substrate high enough, and intervals closed above."""
    from checks import expectations as expect

    rules = [expect.at_least(NAME, "ratio", number(limits, NAME, "limit"), rule="ratio")]
    if limits[NAME]["hold_open_interval"]:
        rules.append(expect.at_most(NAME, "open_count", 0.0, rule="open"))
    return rules


def measure(row: Row, limits: Limits) -> Measure:
    """Substrate over K, or constants open above, against the limit."""
    if row["rule"] == "open":
        return Measure(known_or_none(row["open_count"]), 0.0, "1")
    return Measure(known_or_none(row["ratio"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """How far the series reaches, and what that leaves unknown."""
    k_name = row["k_name"]
    if row["rule"] == "open":
        names = [name for name, is_open in (("Vmax", row["vmax_open"]), (k_name, row["k_open"])) if is_open]
        intervals = (
            "interval of " + names[0] + " is"
            if len(names) == 1
            else f"intervals of {' and '.join(names)} are"
        )
        return (
            f"The 95 % {intervals} open above ({counted(len(names), 'constant')}, limit 0): the data do not "
            f"bound {'it' if len(names) == 1 else 'them'}."
        )
    limit = number(limits, NAME, "limit")
    ratio = float(row["ratio"])
    measured, limit_text = beside(ratio, limit)
    power = known_or_none(row["hill_n"])
    how = f"is {measured} times {k_name}" if power is None else f"gives (S/{k_name})^{power:.2f} = {measured}"
    return (
        f"The highest clear substrate, {row['highest_substrate_um']:.6g} µM, {how} (limit {limit_text}): "
        f"it reaches {ratio / (1 + ratio) * 100:.0f} % of Vmax, so Vmax and {k_name} rest on extrapolation."
    )


GATE = Gate(
    name=NAME,
    subjects=("series",),
    phase="series",
    severity="hold",
    unassessed="held",
    settings=(
        Setting(
            "limit",
            3.0,
            "1",
            "Lowest allowed (highest substrate / K)^n, with n the Hill coefficient or 1",
            "75 % of Vmax; common practice",
            low=0.01,
            high=1000.0,
        ),
        Setting(
            "hold_open_interval",
            True,
            "",
            "Whether a 95 % interval of Vmax or K that is open above holds the series",
            "an open interval says that the data do not bound the constant",
        ),
    ),
    text=__doc__,
    needs={"series": ("ratio", "open_count")},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
