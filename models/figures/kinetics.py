"""Figures of kinetics: rates against substrate with their fit, a progress curve, a profile of a constant.

Residuals stand under every fit. What is drawn was computed elsewhere.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from models.figures.drawing import (
    house_style,
    label,
    legend,
    limit_line,
    marks,
    quantity,
    stacked_panels,
    zero_line,
)
from models.figures.logarithmic import make_logarithmic
from models.figures.theme import DASHES, LIGHT, LINE, SMALL_PT, THIN, Theme

Floats = NDArray[np.float64]

_SIZE_IN, _HEIGHTS = (5.2, 4.2), (3.0, 1.0)


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
    standing: NDArray[np.object_] | Sequence[str] | None = None,
    x_label: str = "substrate",
    x_unit: str = "umol/L",
    rate_unit: str = "umol/L/s",
    lines_title: str | None = None,
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
    lines_title
        What the lines' names are: a quantity and its unit.
    logarithmic
        Whether x is on a logarithmic scale; what is measured at 0 then stands apart at the left.
    """
    with house_style():
        figure, (main, below) = stacked_panels(_HEIGHTS, theme, _SIZE_IN)
        axis = make_logarithmic((main, below), theme, x[np.isfinite(rate)]) if logarithmic else None
        for number, line in enumerate(lines):
            shown = np.ones(line.x.shape, dtype=bool) if axis is None else axis.shown(line.x)
            parts = [(line.x[shown], shown)]
            at_zero = np.flatnonzero(line.x == 0)
            if axis is not None and axis.zero_at is not None and at_zero.size:
                parts.append((np.array(axis.zero_span), at_zero[[0, 0]]))
            for place, (along, which) in enumerate(parts):
                if line.low is not None and line.high is not None:
                    low, high = line.low[which], line.high[which]
                    main.fill_between(along, low, high, color=theme.band, linewidth=0, zorder=0)
                main.plot(
                    along,
                    line.y[which],
                    color=theme.fit,
                    # Dashes come again after the last; then thinner.
                    linewidth=LINE if number < len(DASHES) else THIN,
                    linestyle=DASHES[number % len(DASHES)],
                    label=line.name if line.name and place == 0 else None,
                    zorder=1,
                )
        at = x if axis is None else axis.place(x)
        marks(main, theme, at, rate, standing, error)
        marks(below, theme, at, rate - fitted, standing, error)
        zero_line(below, theme)
        if axis is None:
            main.set_xlim(left=min(0.0, float(np.nanmin(x, initial=0.0))))
        main.margins(y=0.08)
        main.set_ylim(bottom=min(0.0, float(np.nanmin(rate, initial=0.0))))
        below.margins(y=0.15)
        label(main, theme, y=quantity("rate", rate_unit))
        label(below, theme, x=quantity(x_label, x_unit), y=quantity("residual", rate_unit, ",\n"))
        if any(line.name for line in lines):
            legend(main, theme, lines_title)
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
    with house_style():
        figure, (main, below) = stacked_panels(_HEIGHTS, theme, _SIZE_IN)
        inside = (time_s >= window_s[0]) & (time_s <= window_s[1]) & np.isfinite(product_um)
        for panel in (main, below):
            panel.axvspan(*window_s, color=theme.band, linewidth=0, zorder=0)
        if blank_um is not None:
            main.plot(time_s, blank_um, color=theme.pale, linewidth=THIN * 1.5, linestyle=DASHES[2])
            last = np.flatnonzero(np.isfinite(blank_um))[-1:]
            for place in last:
                main.annotate(
                    "blank",
                    (float(time_s[place]), float(blank_um[place])),
                    xytext=(0, 3),
                    textcoords="offset points",
                    ha="right",
                    va="bottom",
                    fontsize=SMALL_PT,
                    color=theme.soft,
                )
        main.plot(time_s, product_um, "o", markersize=2.5, color=theme.ink, zorder=3)
        residual = np.full(time_s.shape, np.nan)
        if inside.any():
            offset = float(np.mean(product_um[inside]) - rate_um_per_s * np.mean(time_s[inside]))
            line = offset + rate_um_per_s * time_s
            ends = np.array([np.nanmin(time_s), np.nanmax(time_s)])
            main.plot(ends, offset + rate_um_per_s * ends, color=theme.fit, linewidth=LINE, zorder=2)
            residual = product_um - line
        below.plot(time_s[inside], residual[inside], "o", markersize=2.5, color=theme.ink)
        zero_line(below, theme)
        below.margins(y=0.15)
        seen = product_um if blank_um is None else np.concatenate([product_um, blank_um])
        known = seen[np.isfinite(seen)]
        if known.size:
            reach = 0.05 * max(float(np.ptp(known)), 1e-12)
            main.set_ylim(float(known.min()) - reach, float(known.max()) + reach)
        label(main, theme, y=quantity("substrate turned over", "umol/L"))
        label(below, theme, x=quantity("time", "s"), y=quantity("residual", "umol/L", ",\n"))
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
    with house_style():
        figure, (main,) = stacked_panels((1.0,), theme, (4.2, 3.0))
        main.plot(values, rise, color=theme.fit, linewidth=LINE)
        limit_line(main, theme, limit, "95 %")
        for end, side in zip(interval, ("left", "right"), strict=True):
            if not np.isfinite(end):
                continue
            main.axvline(end, color=theme.soft, linewidth=THIN, linestyle=DASHES[2])
            main.annotate(
                f"{end:.4g}",
                (end, 1.0),
                xycoords=("data", "axes fraction"),
                xytext=(-3 if side == "left" else 3, 0),
                textcoords="offset points",
                ha="right" if side == "left" else "left",
                va="bottom",
                fontsize=SMALL_PT,
                color=theme.soft,
            )
        main.set_ylim(0.0, 3.0 * limit)
        main.set_xlim(float(np.min(values)), float(np.max(values)))
        label(main, theme, x=quantity(name, unit), y="rise of the sum of squares")
    return figure
