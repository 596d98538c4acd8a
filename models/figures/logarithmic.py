"""A logarithmic horizontal axis in plain numbers, with a place for zero beside it.

What has no logarithm is a measurement all the same: wells without a modulator stand at the left, apart.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import FixedFormatter, FixedLocator, NullFormatter
from numpy.typing import NDArray

from models.figures.theme import Theme

Floats = NDArray[np.float64]

_APART, _MARGIN = 3.0, 1.35


@dataclass(frozen=True)
class LogarithmicAxis:
    """Where values stand.

    Attributes
    ----------
    lowest, highest
        Of the values above zero.
    zero_at
        Where zero is drawn; None where there is no zero.
    """

    lowest: float
    highest: float
    zero_at: float | None

    def place(self, values: Floats) -> Floats:
        """Zero at its own place, the others where they are; NaN below zero."""
        zero = np.nan if self.zero_at is None else self.zero_at
        return np.where(values > 0, values, np.where(values == 0, zero, np.nan))

    def shown(self, values: Floats) -> NDArray[np.bool_]:
        """Which points of a line are drawn: those above zero, and not across the gap."""
        gap = 0.0 if self.zero_at is None else self.lowest / np.sqrt(_APART)
        inside: NDArray[np.bool_] = values > gap
        return inside

    @property
    def zero_span(self) -> tuple[float, float]:
        """Ends of a short line at zero."""
        at = np.nan if self.zero_at is None else self.zero_at
        return at / 1.15, at * 1.15


def make_logarithmic(panels: Sequence[Axes], theme: Theme, values: Floats) -> LogarithmicAxis | None:
    """Make the shared horizontal axis of panels logarithmic; None, and nothing done, where no value is above
    zero."""
    positive = values[values > 0]
    if positive.size == 0:
        return None
    lowest, highest = float(positive.min()), float(positive.max())
    zero_at = lowest / _APART if np.any(values == 0) else None
    axis = LogarithmicAxis(lowest, highest, zero_at)
    labelled, between = _ticks(lowest, highest)
    places, names = labelled, [f"{tick:g}" for tick in labelled]
    if zero_at is not None:
        places, names = [zero_at, *places], ["0", *names]
    for panel in panels:
        panel.set_xscale("log")
        panel.xaxis.set_major_locator(FixedLocator(places))
        panel.xaxis.set_major_formatter(FixedFormatter(names))
        panel.xaxis.set_minor_locator(FixedLocator(between))
        panel.xaxis.set_minor_formatter(NullFormatter())
        panel.set_xlim((lowest if zero_at is None else zero_at) / _MARGIN, highest * _MARGIN)
        if zero_at is not None:
            panel.plot(
                [lowest / np.sqrt(_APART)],
                [0.0],
                marker=[(-0.6, -1.0), (0.6, 1.0)],
                markersize=7,
                markeredgewidth=1.2,
                color=theme.soft,
                linestyle="none",
                clip_on=False,
                transform=panel.get_xaxis_transform(),
            )
    return axis


def _ticks(lowest: float, highest: float) -> tuple[list[float], list[float]]:
    """Ticks with a number (powers of ten; also 2 and 5 of each where those are few), and ticks without."""
    first, last = int(np.floor(np.log10(lowest))) - 1, int(np.ceil(np.log10(highest))) + 1
    steps = [float(f"{digit}e{power}") for power in range(first, last + 1) for digit in range(1, 10)]
    inside = [tick for tick in steps if lowest / 1.2 <= tick <= highest * 1.2]
    decades = [tick for tick in inside if f"{tick:e}"[0] == "1"]
    labelled = decades if len(decades) > 3 else [tick for tick in inside if f"{tick:e}"[0] in "125"]
    return labelled, [tick for tick in inside if tick not in labelled]
