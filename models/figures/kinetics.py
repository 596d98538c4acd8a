"""Figures of kinetics: rates against substrate with their fit, a progress curve, a profile of a constant.

Residuals stand under every fit. What is drawn was computed elsewhere.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from models.figures.drawing import label, legend, marks, new_figure, quantity, zero_line
from models.figures.theme import DASHES, LIGHT, LINE, THIN, Theme

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class FittedLine:
    """A fitted law along one axis.

    Attributes
    ----------
    x, y
        Shape (points,).
    low, high
        Confidence band, same shape; None where it is not known.
    name
        What tells this line from others; empty for a lone one.
    """

    x: Floats
    y: Floats
    low: Floats | None = None
    high: Floats | None = None
    name: str = ""


def draw_rates(
    x: Floats,
    rate: Floats,
    fitted: Floats,
    lines: Sequence[FittedLine],
    *,
    error: Floats | None = None,
    standing: NDArray[np.object_] | None = None,
    x_label: str = "substrate",
    x_unit: str = "µM",
    rate_unit: str = "µM/s",
    logarithmic: bool = False,
    theme: Theme = LIGHT,
) -> Figure:
    """Rates against substrate (or modulator) with the fitted law, its band, and the residuals beneath.

    Parameters
    ----------
    x, rate, fitted, error
        Of each rate, shape (rates,); error None where it is not known.
    lines
        The law, a line for each level of a modulator.
    standing
        clear, held or void of each rate; None for all clear.
    logarithmic
        Whether x is on a logarithmic scale; rates at 0 are then left out.
    """
    figure, (main, below) = new_figure((3.0, 1.0), theme, (5.2, 4.2))
    if logarithmic:
        positive = x > 0
        x, rate, fitted = (np.where(positive, values, np.nan) for values in (x, rate, fitted))
        main.set_xscale("log")
    for number, line in enumerate(lines):
        shown = line.x > 0 if logarithmic else np.ones(line.x.shape, dtype=bool)
        if line.low is not None and line.high is not None:
            main.fill_between(
                line.x[shown], line.low[shown], line.high[shown], color=theme.band, linewidth=0, zorder=0
            )
        main.plot(
            line.x[shown],
            line.y[shown],
            color=theme.fit,
            linewidth=LINE,
            linestyle=DASHES[number % len(DASHES)],
            label=line.name or None,
            zorder=1,
        )
    marks(main, theme, x, rate, standing, error)
    marks(below, theme, x, rate - fitted, standing, error)
    zero_line(below, theme)
    if not logarithmic:
        main.set_xlim(left=0.0)
    main.set_ylim(bottom=min(0.0, float(np.nanmin(rate))))
    label(main, theme, y=quantity("rate", rate_unit))
    label(below, theme, x=quantity(x_label, x_unit), y="residual")
    if any(line.name for line in lines):
        legend(main, theme)
    return figure


def draw_progress(
    time_s: Floats,
    product_um: Floats,
    window_s: tuple[float, float],
    rate_um_per_s: float,
    *,
    blank_um: Floats | None = None,
    theme: Theme = LIGHT,
) -> Figure:
    """A progress curve with the window of its rate, the line drawn through, and the residuals beneath.

    Parameters
    ----------
    time_s, product_um
        Reads of one well, shape (reads,); NaN where a read is not usable.
    window_s
        Start and end of the window [s].
    rate_um_per_s
        Slope of the line.
    blank_um
        The matching blank, same shape.
    """
    figure, (main, below) = new_figure((3.0, 1.0), theme, (5.2, 4.2))
    inside = (time_s >= window_s[0]) & (time_s <= window_s[1]) & np.isfinite(product_um)
    for panel in (main, below):
        panel.axvspan(*window_s, color=theme.band, linewidth=0, zorder=0)
    if blank_um is not None:
        main.plot(time_s, blank_um, color=theme.pale, linewidth=THIN, linestyle=DASHES[2], label="blank")
    main.plot(time_s, product_um, "o", markersize=2.5, color=theme.ink, zorder=3)
    residual = np.full(time_s.shape, np.nan)
    if inside.any():
        offset = float(np.mean(product_um[inside]) - rate_um_per_s * np.mean(time_s[inside]))
        line = offset + rate_um_per_s * time_s
        main.axline((0.0, offset), slope=rate_um_per_s, color=theme.fit, linewidth=LINE, zorder=2)
        residual = product_um - line
    below.plot(time_s[inside], residual[inside], "o", markersize=2.5, color=theme.ink)
    zero_line(below, theme)
    known = product_um[np.isfinite(product_um)]
    if known.size:
        reach = 0.05 * max(float(np.ptp(known)), 1e-12)
        main.set_ylim(float(known.min()) - reach, float(known.max()) + reach)
    label(main, theme, y=quantity("substrate turned over", "µM"))
    label(below, theme, x=quantity("time", "s"), y="residual")
    if blank_um is not None:
        legend(main, theme)
    return figure


def draw_profile(
    values: Floats,
    rise: Floats,
    limit: float,
    interval: tuple[float, float],
    name: str,
    unit: str,
    theme: Theme = LIGHT,
) -> Figure:
    """Profile likelihood of a constant: how much worse the best fit becomes as it is held elsewhere.

    Parameters
    ----------
    values, rise
        Values of the constant and the rise of the weighted sum of squares over its scale, shape (values,).
    limit
        Rise at which the 95 % interval ends.
    interval
        Its ends, NaN where open.
    """
    figure, (main,) = new_figure((1.0,), theme, (4.2, 3.0))
    main.plot(values, rise, color=theme.fit, linewidth=LINE)
    main.axhline(limit, color=theme.soft, linewidth=THIN, linestyle=DASHES[1])
    for end in interval:
        if np.isfinite(end):
            main.axvline(end, color=theme.soft, linewidth=THIN, linestyle=DASHES[2])
    main.set_ylim(0.0, 3.0 * limit)
    label(main, theme, x=quantity(name, unit), y="rise of the sum of squares")
    return figure
