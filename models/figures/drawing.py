"""What all figures share: axes with quantity and unit, marks for standing, limits, and bytes of a figure.

Figures are made without matplotlib's global state, and give the same bytes every time.
"""

from __future__ import annotations

import io
from collections.abc import Sequence
from typing import Any

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from numpy.typing import NDArray

from models.figures.theme import HEAVY, LIGHT, MARK_PT, SMALL_PT, TEXT_PT, THIN, Theme

Floats = NDArray[np.float64]

_FONTS = ["Segoe UI", "Roboto", "Helvetica Neue", "Liberation Sans", "DejaVu Sans"]
_SAME_BYTES: dict[Any, Any] = {"svg.hashsalt": "halfsat", "svg.fonttype": "none", "font.family": _FONTS}


def new_figure(
    heights: Sequence[float] = (1.0,), theme: Theme = LIGHT, size_in: tuple[float, float] = (5.2, 3.6)
) -> tuple[Figure, list[Axes]]:
    """A figure of panels one above the other, which share their horizontal axis.

    Parameters
    ----------
    heights
        Relative heights of the panels.
    theme
        Colours.
    size_in
        Width and height [inch].
    """
    figure = Figure(figsize=size_in, facecolor=theme.paper, layout="constrained")
    FigureCanvasAgg(figure)
    grid = figure.add_gridspec(len(heights), 1, height_ratios=list(heights), hspace=0.06)
    axes: list[Axes] = []
    for place in range(len(heights)):
        axes.append(figure.add_subplot(grid[place], sharex=axes[0] if axes else None))
    for panel in axes:
        panel.set_facecolor(theme.paper)
        for side in ("top", "right"):
            panel.spines[side].set_visible(False)
        for side in ("left", "bottom"):
            panel.spines[side].set(color=theme.soft, linewidth=THIN)
        panel.tick_params(colors=theme.soft, labelcolor=theme.ink, labelsize=SMALL_PT, width=THIN, length=3)
    for panel in axes[:-1]:
        panel.tick_params(labelbottom=False)
    return figure, axes


def label(axes: Axes, theme: Theme, x: str | None = None, y: str | None = None) -> None:
    """Name the axes: a quantity, a comma and its unit."""
    if x is not None:
        axes.set_xlabel(x, color=theme.ink, fontsize=TEXT_PT)
    if y is not None:
        axes.set_ylabel(y, color=theme.ink, fontsize=TEXT_PT)


def quantity(name: str, unit: str) -> str:
    """Label of an axis: `name, unit`, or the name of a pure number."""
    return name if unit in ("", "1") else f"{name}, {unit}"


def marks(
    axes: Axes,
    theme: Theme,
    x: Floats,
    y: Floats,
    standing: NDArray[np.object_] | Sequence[str] | None = None,
    error: Floats | None = None,
) -> None:
    """Points by standing: clear a thin open ring, held a disc filled to the half, void a ring struck through.

    Parameters
    ----------
    x, y
        Shape (points,); points that are not known are left out.
    standing
        clear, held or void of each; None for all clear.
    error
        Standard errors of y, drawn as bars.
    """
    names = (
        np.full(x.shape, "clear", dtype=object) if standing is None else np.asarray(standing, dtype=object)
    )
    known = np.isfinite(x) & np.isfinite(y)
    if error is not None:
        axes.errorbar(
            x[known], y[known], error[known], fmt="none", ecolor=theme.pale, elinewidth=THIN, zorder=2
        )
    styles: dict[str, dict[str, Any]] = {
        "clear": {"markerfacecolor": theme.paper, "markeredgecolor": theme.ink, "markeredgewidth": 0.9},
        "held": {
            "markerfacecolor": theme.held,
            "markerfacecoloralt": theme.paper,
            "markeredgecolor": theme.held,
            "markeredgewidth": HEAVY * 0.7,
            "fillstyle": "bottom",
        },
        "void": {"markerfacecolor": theme.paper, "markeredgecolor": theme.pale, "markeredgewidth": 0.9},
    }
    for name, style in styles.items():
        mine = known & (names == name)
        if not mine.any():
            continue
        size = MARK_PT * (1.25 if name == "held" else 1.0)
        axes.plot(x[mine], y[mine], "o", markersize=size, zorder=3, **style)
        if name == "void":
            axes.plot(x[mine], y[mine], "_", markersize=size * 1.8, color=theme.pale, zorder=4)


def limit_line(axes: Axes, theme: Theme, value: float, text: str) -> None:
    """A limit as a thin rule with its value at the right."""
    axes.axhline(value, color=theme.soft, linewidth=THIN, linestyle=(0, (4, 3)), zorder=1)
    axes.annotate(
        text,
        (1.0, value),
        xycoords=("axes fraction", "data"),
        xytext=(-2, 2),
        textcoords="offset points",
        ha="right",
        va="bottom",
        fontsize=SMALL_PT,
        color=theme.soft,
    )


def zero_line(axes: Axes, theme: Theme) -> None:
    """Where residuals are nothing."""
    axes.axhline(0.0, color=theme.rule, linewidth=THIN, zorder=1)


def legend(axes: Axes, theme: Theme) -> None:
    """Names of lines without a box."""
    axes.legend(frameon=False, fontsize=SMALL_PT, labelcolor=theme.ink, handlelength=2.4)


def svg_bytes(figure: Figure) -> bytes:
    """The figure as SVG: text as text, no date, the same bytes every time."""
    return _saved(figure, "svg", metadata={"Date": None, "Creator": None})


def png_bytes(figure: Figure, dpi: int = 144) -> bytes:
    """The figure as PNG."""
    return _saved(figure, "png", dpi=dpi, metadata={"Software": None})


def pdf_bytes(figure: Figure) -> bytes:
    """The figure as a page of PDF, without dates."""
    return _saved(figure, "pdf", metadata={"CreationDate": None, "Creator": None, "Producer": None})


def _saved(figure: Figure, kind: str, **options: Any) -> bytes:
    written = io.BytesIO()
    with matplotlib.rc_context(_SAME_BYTES):
        figure.savefig(written, format=kind, facecolor=figure.get_facecolor(), **options)
    return written.getvalue()
