"""Figures of the review page as SVG, by the one plotting helper. What is drawn was read elsewhere."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from models.errors import UnknownName
from models.figures.drawing import label, plain_axes, quantity, stacked_panels, svg_bytes
from models.figures.kinetics import FittedLine, draw_progress, draw_rates
from models.figures.theme import THEMES
from models.kinetics import Fit, FitRefused, fit

Floats = NDArray[np.float64]

LINEAR_PLOTS = {
    "reciprocal": ("Lineweaver-Burk", "1/S", "1/v"),
    "hanes": ("Hanes-Woolf", "S", "S/v"),
    "eadie": ("Eadie-Hofstee", "v/S", "v"),
}
"""Linear plots that are drawn on demand: name, and what stands along each axis."""


def progress_svg(time_s: Floats, product_um: Floats, row: Any, theme: str) -> bytes:
    """A well's progress curve with its window, the line of its rate, the blank and the residuals.

    Parameters
    ----------
    time_s, product_um
        Shape (reads,).
    row
        The well with its rate: window_start_s, window_end_s, raw_rate_um_per_s, blank_rate_um_per_s.
    theme
        light, dark or print.
    """
    window = (row.window_start_s, row.window_end_s)
    start_s, end_s = (float("nan") if each is None else float(each) for each in window)
    known = np.isfinite(product_um)
    base = float(product_um[known][0]) if known.any() else 0.0
    blank = None if row.blank_rate_um_per_s is None else base + row.blank_rate_um_per_s * (time_s - time_s[0])
    if not np.isfinite(start_s):
        start_s = end_s = float(np.nanmin(time_s))
    rate = float("nan") if row.raw_rate_um_per_s is None else float(row.raw_rate_um_per_s)
    return svg_bytes(
        draw_progress(time_s, product_um, (start_s, end_s), rate, blank_um=blank, theme=THEMES[theme])
    )


def refitted(points: Sequence[Any]) -> Fit | None:
    """The stored fit again, from its stored points and their weights, with its band and profiles.

    None where it cannot be: too few points for intervals, or a law that needs more than substrate.
    """
    if not points:
        return None
    try:
        return fit(
            [point.substrate_um for point in points],
            [point.v_um_per_s for point in points],
            str(points[0].law),
            standard_error=[point.v_sd_um_per_s for point in points],
        )
    except (FitRefused, UnknownName, ValueError):
        return None


def series_svg(points: Sequence[Any], held: Sequence[Any], theme: str, *, logarithmic: bool = False) -> bytes:
    """Rates of a series against substrate with the fit, its band, and what is held beside it.

    Parameters
    ----------
    points
        Points of the fit that is drawn.
    held
        Wells that the fit leaves out: mean_substrate_um, v0_um_per_s, v0_se_um_per_s, standing.
    """
    found = refitted(points)
    shown = [well for well in held if well.v0_um_per_s is not None and well.mean_substrate_um is not None]
    x = np.array([*(p.substrate_um for p in points), *(w.mean_substrate_um for w in shown)], dtype=float)
    rate = np.array([*(p.v_um_per_s for p in points), *(w.v0_um_per_s for w in shown)], dtype=float)
    error = np.array(
        [*(p.v_sd_um_per_s for p in points), *(w.v0_se_um_per_s or 0.0 for w in shown)], dtype=float
    )
    standing = [*("clear" for _ in points), *(str(well.standing) for well in shown)]
    lines: list[FittedLine] = []
    fitted = np.full(x.shape, np.nan)
    fitted[: len(points)] = [point.fitted_um_per_s for point in points]
    if found is not None:
        band = found.band()
        along, mean, low, high = (
            band[name].to_numpy(dtype=float) for name in ("substrate", "rate", "low", "high")
        )
        lines = [FittedLine(along, mean, low, high)]
        fitted = found.rate(x)
    return svg_bytes(
        draw_rates(
            x,
            rate,
            fitted,
            lines,
            error=error,
            standing=standing,
            logarithmic=logarithmic,
            theme=THEMES[theme],
        )
    )


def profile_svg(points: Sequence[Any], constant: str, theme: str) -> bytes | None:
    """Profile likelihood of a constant of a series; None where there is none."""
    found = refitted(points)
    if found is None or constant not in found.constants["constant"].tolist():
        return None
    return svg_bytes(found.profile_figure(constant, theme))


def linear_svg(points: Sequence[Any], kind: str, theme: str) -> bytes:
    """A linear plot of the rates, for the eye alone: no line is fitted to it, the law's own is drawn.

    Raises
    ------
    UnknownName
        If there is no such plot.
    """
    if kind not in LINEAR_PLOTS:
        raise UnknownName(f"there is no plot '{kind}'", remedy=f"plots are {', '.join(LINEAR_PLOTS)}")
    _, x_name, y_name = LINEAR_PLOTS[kind]
    used = [point for point in points if point.v_um_per_s > 0 and point.substrate_um > 0]
    s = np.array([point.substrate_um for point in used], dtype=float)
    figure, (panel,) = stacked_panels((1.0,), THEMES[theme], (5.2, 3.2))
    units = {"1/S": "L/µmol", "1/v": "s/µM", "S": "umol/L", "S/v": "s", "v/S": "1/s", "v": "umol/L/s"}
    for field, style in (("v_um_per_s", "o"), ("fitted_um_per_s", "-")):
        v = np.array([getattr(point, field) for point in used], dtype=float)
        quantities = {"1/S": 1 / s, "1/v": 1 / v, "S": s, "S/v": s / v, "v/S": v / s, "v": v}
        color = THEMES[theme].ink if style == "o" else THEMES[theme].fit
        panel.plot(
            quantities[x_name],
            quantities[y_name],
            style,
            color=color,
            markersize=3.5,
            linewidth=1.2,
            mfc="none",
        )
    plain_axes(panel, THEMES[theme])
    label(panel, THEMES[theme], quantity(x_name, units[x_name]), quantity(y_name, units[y_name]))
    return svg_bytes(figure)
