"""Holds a well in which too much substrate is gone before an initial rate can be read.

Purpose: an initial rate needs a stretch in which substrate is nearly constant. If even the shortest usable
window ends past the limit, there is no such stretch: too much enzyme, or reads too far apart.

Formula: X = (substrate consumed at the end of the shortest usable window) / (substrate, or limiting
reagent, at the start) > limit. For a first-order decay the mean slope over the window is
X / (-ln(1 - X)) of the initial one (about 1 - X/2), which bounds how low a rate paired with the nominal
substrate can be.

Source: R. Lee, I. B. Wilson, Biochim. Biophys. Acta 242 (1971) 519-522, doi:10.1016/0005-2744(71)90144-6.

Default: 10 %, the usual bound for initial rates (common practice). Rates here are paired with the mean
substrate over the window, which tolerates more; the limit leaves room for product inhibition.
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
from checks.gates.wording import beside

NAME = "substrate_depletion"


def metrics(data: GateInput) -> pd.DataFrame:
    """Conversion at the end of the shortest usable window, of wells with enzyme and substrate."""
    wells = data.wells_with_rates(ENZYME_ROLES, with_substrate=True)
    conversion = wells["shortest_conversion"].to_numpy(dtype=float)
    reason = np.where(np.isfinite(conversion), "", NO_RATE)
    return metrics_frame("well", wells, reason, conversion=conversion)


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect a conversion not above the limit."""
    from checks import expectations as expect

    return [expect.at_most(NAME, "conversion", number(limits, NAME, "limit"), rule="conversion")]


def measure(row: Row, limits: Limits) -> Measure:
    """Conversion against its limit."""
    return Measure(known_or_none(row["conversion"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """What was consumed, and how low that makes the rate."""
    consumed = float(row["conversion"])
    measured, limit = beside(consumed, number(limits, NAME, "limit"), 100)
    said = f"{measured} % of the substrate was consumed within the shortest usable window (limit {limit} %)."
    if consumed >= 1:
        return f"{said} The substrate ran out: this is no initial rate."
    low = 1 - consumed / -np.log1p(-consumed)
    return f"{said} Its rate is up to {low * 100:.0f} % low."


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
            "Share of the substrate that may be consumed within the shortest usable window; "
            "windows are kept below it too",
            "the usual bound for initial rates; common practice, no source",
            low=0.001,
            high=0.9,
        ),
    ),
    text=__doc__,
    needs={"well": ("conversion",)},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
