"""Panels of lines and points with limits: operating characteristics, control charts, trends."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from models.figures.drawing import (
    empty_figure,
    house_style,
    label,
    legend,
    limit_line,
    marks,
    plain_axes,
)
from models.figures.logarithmic import make_logarithmic
from models.figures.theme import DASHES, LIGHT, LINE, TEXT_PT, THIN, Theme

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Line:
    """A line through points.

    Attributes
    ----------
    x, y
        Shape (points,).
    error
        Standard errors of y; None where not known.
    joined
        Whether the points are joined.
    standing
        clear, held or void of each point; None draws no mark but for a line that is not joined.
    """

    x: Floats
    y: Floats
    name: str = ""
    error: Floats | None = None
    joined: bool = True
    standing: NDArray[np.object_] | None = None


@dataclass(frozen=True)
class Panel:
    """One panel: lines, limits (value and text), labels with units."""

    title: str
    lines: tuple[Line, ...]
    x_label: str
    y_label: str
    limits: tuple[tuple[float, str], ...] = ()
    y_range: tuple[float, float] | None = None
    logarithmic: bool = False


def draw_panels(panels: Sequence[Panel], theme: Theme = LIGHT, columns: int = 2) -> Figure:
    """Panels side by side, as many rows as they need."""
    columns = max(1, min(columns, len(panels)))
    rows = max(1, math.ceil(len(panels) / columns))
    with house_style():
        figure = empty_figure((3.6 * columns, 2.5 * rows), theme)
        for place, panel in enumerate(panels):
            _draw(plain_axes(figure.add_subplot(rows, columns, place + 1), theme), panel, theme)
    return figure


def _draw(axes: Axes, panel: Panel, theme: Theme) -> None:
    every = np.concatenate([line.x for line in panel.lines]) if panel.lines else np.empty(0)
    axis = make_logarithmic((axes,), theme, every) if panel.logarithmic else None
    for number, line in enumerate(panel.lines):
        x = line.x if axis is None else axis.place(line.x)
        if line.joined:
            axes.plot(
                x,
                line.y,
                color=theme.fit,
                linewidth=LINE if number < len(DASHES) else THIN,
                linestyle=DASHES[number % len(DASHES)],
                label=line.name or None,
                zorder=1,
            )
        if line.standing is not None or line.error is not None or not line.joined:
            marks(axes, theme, x, line.y, line.standing, line.error)
    for value, text in panel.limits:
        limit_line(axes, theme, value, text)
    if panel.y_range is not None:
        axes.set_ylim(*panel.y_range)
    axes.set_title(panel.title, fontsize=TEXT_PT, color=theme.ink, loc="left")
    label(axes, theme, x=panel.x_label, y=panel.y_label)
    if any(line.name for line in panel.lines):
        legend(axes, theme)
