"""Analytic progress curves of the Michaelis-Menten law: the closed form here, and the constants that a fit of
the curves gives back.

Every expected number stands in fixtures/reference/analytic_progress.csv, made by an independent program.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from models.kinetics.curves import CurveBatch
from models.kinetics.progress.fitting import fit_progress
from models.kinetics.progress.integrated import product_formed
from tests.published.published_laws import read
from tests.published.published_values import Agreement

SCHNELL_MENDOZA = "Schnell and Mendoza 1997, doi:10.1006/jtbi.1997.0425, evaluated to 12 digits"
PRINTED_DIGITS = 11.0
"""The values carry 12 digits: rounding leaves 11.3 of them at worst."""


def progress_agreements() -> list[Agreement]:
    """Every curve's least agreeing value, and the constants of all curves fitted together."""
    return [*_curves(), *_constants()]


def _curves() -> Iterator[Agreement]:
    data = read("analytic_progress.csv")
    for (s0, vmax, km), curve in data.groupby(["S0_uM", "Vmax_uM_per_min", "Km_uM"], sort=False):
        later = curve[curve["t_min"] > 0]
        published = later["product_uM"].to_numpy(float)
        found = product_formed(s0, vmax / 60.0, km, 60.0 * later["t_min"].to_numpy(float))
        worst = int(np.argmax(np.abs(found / published - 1.0)))
        yield Agreement(
            f"Progress curve, S0 {s0:g}",
            f"product at {later['t_min'].iloc[worst]:g} min (worst)",
            float(published[worst]),
            float(found[worst]),
            PRINTED_DIGITS,
            SCHNELL_MENDOZA,
        )


def _constants() -> Iterator[Agreement]:
    """All curves fitted as one series: 12 printed digits and well-told constants leave 10."""
    data = read("analytic_progress.csv")
    curves = [curve for _, curve in data.groupby("S0_uM", sort=False)]
    reads = max(len(curve) for curve in curves)

    def laid(name: str) -> np.ndarray:
        return np.stack(
            [np.pad(c[name].to_numpy(float), (0, reads - len(c)), constant_values=np.nan) for c in curves]
        )

    count = len(curves)
    level = np.array([curve["S0_uM"].iloc[0] for curve in curves], dtype=float)
    none = np.zeros(count, dtype=bool)
    batch = CurveBatch(
        60.0 * laid("t_min"), laid("product_uM"), np.zeros(count, dtype=int), np.zeros(count, dtype=int),
        none, none, level, level, none,
    )  # fmt: skip
    found = fit_progress(batch, 1).constants.set_index("constant")["value"]
    expected = {"vmax": data["Vmax_uM_per_min"].iloc[0] / 60.0, "km": data["Km_uM"].iloc[0]}
    for constant, published in expected.items():
        value = float(found.get(constant, np.nan))
        yield Agreement("Three curves, one fit", constant, float(published), value, 10.0, SCHNELL_MENDOZA)
