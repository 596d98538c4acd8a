"""What all figures share: the house's style, axes with quantity and unit, marks for standing, limits, bytes.

Figures are made without matplotlib's global state: what a notebook has set there neither shows in a figure
nor changes by it, and a figure gives the same bytes every time.
"""

from __future__ import annotations

import io
import re
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from threading import RLock
from typing import Any

import matplotlib.style
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import ScalarFormatter
from numpy.typing import NDArray

from models.figures.theme import HEAVY, LIGHT, MARK_PT, SMALL_PT, TEXT_PT, THIN, Theme

Floats = NDArray[np.float64]

# The one font that comes with matplotlib: what is laid out must not depend on the fonts of a machine.
_STYLE: dict[Any, Any] = {
    "svg.hashsalt": "halfsat",
    "svg.fonttype": "none",
    "font.family": ["DejaVu Sans"],
    "axes.axisbelow": True,
    "axes.formatter.useoffset": False,
    "axes.formatter.limits": (-4, 5),
    "axes.formatter.use_mathtext": True,
}
_SYSTEM_SANS = (
    "font-family: system-ui, -apple-system, 'Segoe UI', Roboto, 'Helvetica Neue', 'DejaVu Sans', sans-serif"
)
_SYMBOLS = {"umol/L": "µM", "umol/L/s": "µM/s", "mmol/L": "mM", "nmol/L": "nM", "1/s": "/s"}
_LOCK = RLock()


class _PlainTicks(ScalarFormatter):
    """Numbers of ticks as plain text; only a power of ten beside the axis is set as a formula."""

    def __call__(self, x: float, pos: int | None = None) -> str:
        """Label of a tick. Setting each as a formula takes most of the time of a small figure."""
        return super().__call__(x, pos).removeprefix(r"$\mathdefault{").removesuffix("}$")


@contextmanager
def house_style() -> Iterator[None]:
    """Draw in the house's style; the settings that were there before come back."""
    # matplotlib keeps its settings for the whole process: threads take turns.
    with _LOCK, matplotlib.style.context(["default", _STYLE]):
        yield


def empty_figure(size_in: tuple[float, float], theme: Theme) -> Figure:
    """A figure without axes, width and height [inch]."""
    figure = Figure(figsize=size_in, facecolor=theme.paper, layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def plain_axes(panel: Axes, theme: Theme) -> Axes:
    """Thin axes at the left and below, no frame."""
    panel.set_facecolor(theme.paper)
    for side in ("top", "right"):
        panel.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        panel.spines[side].set(color=theme.soft, linewidth=THIN)
    panel.tick_params(
        which="both", colors=theme.soft, labelcolor=theme.ink, labelsize=SMALL_PT, width=THIN, length=3
    )
    panel.tick_params(which="minor", length=1.5)
    for axis in (panel.xaxis, panel.yaxis):
        axis.set_major_formatter(_PlainTicks())
        axis.get_offset_text().set(color=theme.ink, fontsize=SMALL_PT)
    return panel


def stacked_panels(
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
    figure = empty_figure(size_in, theme)
    grid = figure.add_gridspec(len(heights), 1, height_ratios=list(heights), hspace=0.06)
    axes: list[Axes] = []
    for place in range(len(heights)):
        panel = figure.add_subplot(grid[place], sharex=axes[0] if axes else None)
        axes.append(plain_axes(panel, theme))
    for panel in axes[:-1]:
        panel.tick_params(labelbottom=False)
    figure.align_ylabels(axes)
    return figure, axes


def label(axes: Axes, theme: Theme, x: str | None = None, y: str | None = None) -> None:
    """Name the axes: a quantity, a comma and its unit."""
    if x is not None:
        axes.set_xlabel(x, color=theme.ink, fontsize=TEXT_PT)
    if y is not None:
        axes.set_ylabel(y, color=theme.ink, fontsize=TEXT_PT, linespacing=1.1)


def quantity(name: str, unit: str, between: str = ", ") -> str:
    """Label of an axis: `name, unit`, or the name of a pure number; the trade's sign for common units."""
    return name if unit in ("", "1") else f"{name}{between}{_SYMBOLS.get(unit, unit)}"


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

    Raises
    ------
    ValueError
        If a standing is none of these.
    """
    names = (
        np.full(x.shape, "clear", dtype=object) if standing is None else np.asarray(standing, dtype=object)
    )
    known = np.isfinite(x) & np.isfinite(y)
    styles: dict[str, dict[str, Any]] = {
        "void": {"markerfacecolor": theme.paper, "markeredgecolor": theme.pale, "markeredgewidth": 0.9},
        "clear": {"markerfacecolor": theme.paper, "markeredgecolor": theme.ink, "markeredgewidth": 0.9},
        "held": {
            "markerfacecolor": theme.held,
            "markerfacecoloralt": theme.paper,
            "markeredgecolor": theme.held,
            "markeredgewidth": HEAVY * 0.7,
            "fillstyle": "left",
        },
    }
    strange = set(names.tolist()) - set(styles)
    if strange:
        raise ValueError(f"no standing is called {sorted(map(str, strange))}: clear, held or void")
    if error is not None:
        axes.errorbar(
            x[known], y[known], error[known], fmt="none", ecolor=theme.pale, elinewidth=0.9, zorder=2
        )
    for above, (name, style) in enumerate(styles.items()):
        mine = known & (names == name)
        if not mine.any():
            continue
        size = MARK_PT * (1.25 if name == "held" else 1.0)
        # In order of weight, so that what is held lies above all.
        axes.plot(x[mine], y[mine], "o", linestyle="none", markersize=size, zorder=3 + 0.2 * above, **style)
        if name == "void":
            stroke: Any = (2, 2, -45)
            axes.plot(
                x[mine],
                y[mine],
                marker=stroke,
                linestyle="none",
                markersize=size * 1.9,
                markeredgewidth=0.9,
                color=theme.pale,
                zorder=3.1,
            )


def limit_line(axes: Axes, theme: Theme, value: float, text: str) -> None:
    """A limit as a thin rule, its value outside at the right, where no data lie."""
    axes.axhline(value, color=theme.soft, linewidth=THIN, linestyle=(0, (4, 3)), zorder=1)
    axes.annotate(
        text,
        (1.0, value),
        xycoords=("axes fraction", "data"),
        xytext=(3, 0),
        textcoords="offset points",
        ha="left",
        va="center",
        fontsize=SMALL_PT,
        color=theme.soft,
    )


def zero_line(axes: Axes, theme: Theme) -> None:
    """Where residuals are nothing."""
    axes.axhline(0.0, color=theme.rule, linewidth=THIN, zorder=1)


def legend(axes: Axes, theme: Theme, title: str | None = None) -> None:
    """Names of lines without a box."""
    box = axes.legend(
        frameon=False,
        fontsize=SMALL_PT,
        labelcolor=theme.ink,
        handlelength=2.8,
        title=title,
        title_fontsize=SMALL_PT,
        alignment="left",
    )
    box.get_title().set_color(theme.soft)


def svg_bytes(figure: Figure) -> bytes:
    """The figure as SVG: text as text in the reader's own sans, no date, the same bytes every time."""
    written = _saved(figure, "svg", metadata={"Date": None, "Creator": None}).decode("utf-8")
    return re.sub(r"font-family: [^;\"]*", _SYSTEM_SANS, written).encode("utf-8")


def png_bytes(figure: Figure, dpi: int = 144) -> bytes:
    """The figure as PNG."""
    return _saved(figure, "png", dpi=dpi, metadata={"Software": None})


def pdf_bytes(figure: Figure) -> bytes:
    """The figure as a page of PDF, without dates."""
    return _saved(figure, "pdf", metadata={"CreationDate": None, "Creator": None, "Producer": None})


def _saved(figure: Figure, kind: str, **options: Any) -> bytes:
    written = io.BytesIO()
    with house_style():
        figure.savefig(written, format=kind, facecolor=figure.get_facecolor(), **options)
    return written.getvalue()
