"""Global fits over grids of substrate and modulator: constants shared by all wells of a lot and enzyme level.

A grid is fitted like a series, with all its wells at once; what is particular is the modulator, its candidate
laws, and Ki from an IC50. This module knows no plates.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import pandas as pd

from models.errors import UnknownName
from models.kinetics.fit_results import FitResult
from models.kinetics.fitting import FitSettings, fit_rates

INHIBITION_LAWS = (
    "competitive_inhibition",
    "uncompetitive_inhibition",
    "noncompetitive_inhibition",
    "mixed_inhibition",
)
ACTIVATION_LAWS = ("essential_activation", "partial_activation")
WITHOUT_EFFECT = "michaelis_menten"
"""A candidate beside the laws over a modulator: that it does nothing."""
Mode = Literal["competitive", "uncompetitive", "noncompetitive"]


def fit_grids(
    rates: pd.DataFrame,
    grid_laws: Sequence[tuple[str, ...]] | None = None,
    settings: FitSettings | None = None,
) -> FitResult:
    """Fit every grid with each of its candidate laws, all wells at once.

    Parameters
    ----------
    rates
        As for `fit_rates`, `series` being the number of the grid, with modulator_um [umol/L] (0 where there
        is none; NaN refuses the grid) and, for tight binding, enzyme_um [umol/L].
    grid_laws
        Names of the candidate laws of each grid; None tries the four laws of inhibition on all. With
        `michaelis_menten` among them the evidence that the modulator acts at all is weighed too.
    settings
        How to fit.

    Returns
    -------
    FitResult
        The simplest law within 2 units of AICc is chosen; every candidate is kept with its evidence.

    Raises
    ------
    UnknownName
        If there is no column modulator_um, or a law is not in the registry.
    """
    if "modulator_um" not in rates.columns:
        raise UnknownName(
            "rates of a grid have no column 'modulator_um'", remedy="add it, 0 where there is none"
        )
    if grid_laws is None:
        grid_laws = [INHIBITION_LAWS] * (int(rates["series"].max()) + 1 if len(rates) else 0)
    return fit_rates(rates, grid_laws, settings)


@dataclass(frozen=True)
class DerivedConstant:
    """A concentration: value, standard error and 95 % interval [umol/L], NaN where open."""

    value: float
    standard_error: float
    low: float
    high: float


def ki_from_ic50(
    ic50: DerivedConstant,
    mode: Mode,
    substrate_um: float,
    km_um: float,
    km_standard_error_um: float = 0.0,
) -> DerivedConstant:
    """Ki of a reversible inhibitor that is not bound tightly, from its IC50.

    Competitive: Ki = IC50 / (1 + S / Km); uncompetitive: Ki = IC50 / (1 + Km / S); pure noncompetitive: Ki =
    IC50 (Cheng and Prusoff 1973, doi:10.1016/0006-2952(73)90196-2). The classic slip is to use it where the
    IC50 is near half of the enzyme's concentration: that calls for the law of tight binding.

    Parameters
    ----------
    ic50
        With its uncertainty [umol/L].
    mode
        How the inhibitor binds.
    substrate_um, km_um, km_standard_error_um
        Substrate of the assay, Michaelis constant and its standard error [umol/L].

    Returns
    -------
    DerivedConstant
        Relative errors of IC50 and of the factor added in squares; the interval's ends are moved in
        proportion, on a logarithmic scale.

    Raises
    ------
    ValueError
        If a concentration is not above zero.
    UnknownName
        If the mode is none of the three.
    """
    if not (substrate_um > 0 and km_um > 0 and ic50.value > 0):
        raise ValueError("IC50, substrate and Km must be above zero")
    if mode == "competitive":
        factor, sensitivity = 1.0 + substrate_um / km_um, substrate_um / (km_um + substrate_um)
    elif mode == "uncompetitive":
        factor, sensitivity = 1.0 + km_um / substrate_um, km_um / (km_um + substrate_um)
    elif mode == "noncompetitive":
        factor, sensitivity = 1.0, 0.0
    else:
        raise UnknownName(
            f"there is no inhibition called '{mode}' here",
            remedy="write competitive, uncompetitive or noncompetitive",
        )
    value = ic50.value / factor
    of_factor = sensitivity * km_standard_error_um / km_um
    relative = float(np.hypot(ic50.standard_error / ic50.value, of_factor))

    def end(of_ic50: float, sign: float) -> float:
        own = abs(float(np.log(of_ic50 / ic50.value))) if of_ic50 > 0 else np.nan
        return value * float(np.exp(sign * np.hypot(own, 1.959964 * of_factor)))

    return DerivedConstant(value, value * relative, end(ic50.low, -1.0), end(ic50.high, 1.0))
