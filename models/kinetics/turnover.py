"""Constants per enzyme: kcat, specific activity and the specificity constant, with their uncertainty.

All follow from a fit's own constants and the enzyme in the assay; the enzyme's own uncertainty is not known
here.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.stats import t as t_distribution

from models.kinetics.fit_results import CONSTANT_COLUMNS, FitResult
from models.kinetics.intervals import LEVEL
from models.kinetics.laws import law

Floats = NDArray[np.float64]

S_PER_MIN = 60.0
MG_PER_L_PER_NG_PER_ML = 1e-3
UM_PER_NM = 1e-3
UM_PER_M = 1e6


@dataclass(frozen=True)
class _Estimate:
    """A constant with its uncertainty, in whatever unit."""

    value: float
    standard_error: float
    low: float
    high: float

    def times(self, factor: float) -> _Estimate:
        return _Estimate(
            self.value * factor, self.standard_error * factor, self.low * factor, self.high * factor
        )


def enzyme_by_amount(enzyme_nm: Floats, enzyme_ng_per_ml: Floats, molar_mass_g_per_mol: Floats) -> Floats:
    """Enzyme [nmol/L]: as given, or mass over molar mass (1 ng/mL over 1 g/mol is 1 ug/g, 1000 nmol/L)."""
    with np.errstate(all="ignore"):
        from_mass = 1e3 * enzyme_ng_per_ml / molar_mass_g_per_mol
    return np.where(np.isfinite(enzyme_nm), enzyme_nm, from_mass)


def turnover(
    result: FitResult, enzyme_nm: Floats, enzyme_ng_per_ml: Floats, molar_mass_g_per_mol: Floats
) -> pd.DataFrame:
    """Rows of constants per enzyme for every fit.

    kcat = vmax / [E]; specific activity = vmax over the enzyme's mass; kcat / K from both constants with
    their covariance. Intervals of kcat and specific activity are those of vmax, scaled. The interval of kcat
    / K is symmetric on a logarithmic scale, where it stays positive. The classic slip is the enzyme in nmol/L
    against a rate in umol/L/s: a factor of 1000.

    Parameters
    ----------
    result
        Fits.
    enzyme_nm, enzyme_ng_per_ml, molar_mass_g_per_mol
        Of each series, by series number, shape (series,); NaN where not known.

    Returns
    -------
    DataFrame
        As `FitResult.constants`, with kcat [1/s], specific_activity [umol/min/mg] and kcat_per_km or
        kcat_per_k_half [L/mol/s]. Where the enzyme is not known, or not above zero, the rows are left out.
    """
    amount = enzyme_by_amount(enzyme_nm, enzyme_ng_per_ml, molar_mass_g_per_mol)
    listed = [result.constants[name].tolist() for name in CONSTANT_COLUMNS]
    estimates = {
        (number, name, constant): _Estimate(value, error, low, high)
        for number, name, _, constant, value, error, low, high, _ in zip(*listed, strict=True)
    }
    rows: list[tuple[object, ...]] = []
    fits = [result.fits[name].tolist() for name in ("series", "law", "chosen", "degrees_of_freedom")]
    for number, name, chosen, degrees in zip(*fits, strict=True):
        vmax = estimates.get((number, name, "vmax"))
        if vmax is None:
            continue
        found: list[tuple[str, _Estimate, str]] = []
        if amount[number] > 0:
            per_enzyme = 1.0 / (amount[number] * UM_PER_NM)
            found.append(("kcat", vmax.times(per_enzyme), "1/s"))
            half = law(name).half_saturation
            if half is not None:
                place = [constant.name for constant in law(name).constants].index(half)
                ratio = _ratio(
                    vmax,
                    estimates[number, name, half],
                    result.covariance[number, name][np.ix_([0, place], [0, place])],
                    degrees,
                )
                found.append((f"kcat_per_{half}", ratio.times(per_enzyme * UM_PER_M), "L/mol/s"))
        if enzyme_ng_per_ml[number] > 0:
            factor = S_PER_MIN / (enzyme_ng_per_ml[number] * MG_PER_L_PER_NG_PER_ML)
            found.append(("specific_activity", vmax.times(factor), "umol/min/mg"))
        rows += [
            (number, name, chosen, constant, e.value, e.standard_error, e.low, e.high, unit)
            for constant, e, unit in found
        ]
    return pd.DataFrame(rows, columns=list(CONSTANT_COLUMNS))


def _ratio(vmax: _Estimate, half: _Estimate, covariance: Floats, degrees: int) -> _Estimate:
    """Vmax over K: variance of the logarithm to first order (GUM, JCGM 100:2008, 5.2.2)."""
    value = vmax.value / half.value
    variance = (
        covariance[0, 0] / vmax.value**2
        + covariance[1, 1] / half.value**2
        - 2.0 * covariance[0, 1] / (vmax.value * half.value)
    )
    relative = float(np.sqrt(variance)) if variance >= 0 else np.nan
    reach = float(t_distribution.ppf(0.5 + LEVEL / 2.0, degrees)) * relative
    return _Estimate(value, value * relative, value * float(np.exp(-reach)), value * float(np.exp(reach)))
