"""The constants of a batch's fits as they are stored: fitted, per enzyme, per sample, with all their error.

The arithmetic is in models.kinetics.turnover and models.calibration; this stage says which of them apply.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from flows.stages.work import PlateWork
from models.calibration.activity import activity, nkat_from_u
from models.calibration.shared_error import add_shared_error
from models.kinetics.fit_results import FitResult
from models.kinetics.turnover import turnover

# What is in proportion to product, and so takes the error of the calibration; Km, K0.5 and n do not.
PROPORTIONAL_UNITS = ("umol/L/s", "1/s", "L/mol/s", "umol/min/mg", "nmol/s/mg", "umol/min/mL", "nmol/s/mL")
VMAX = "vmax"
SPECIFIC_ACTIVITY = "specific_activity"


def stored_constants(plates: Sequence[PlateWork], subjects: pd.DataFrame, result: FitResult) -> pd.DataFrame:
    """Every constant of every fit.

    Parameters
    ----------
    plates
        Plate reads by number, with assay and conversion.
    subjects
        Series or grids by number (the index 0, 1, ...): plate, enzyme_nm, enzyme_ng_per_ml.
    result
        Their fits.

    Returns
    -------
    DataFrame
        Columns of `FitResult.constants` and `assay_relative_error`.
    """
    works = [plates[plate] for plate in subjects["plate"]]
    masses = [work.recipe.assay.molar_mass_g_per_mol for work in works]
    derived = turnover(
        result,
        enzyme_nm=subjects["enzyme_nm"].to_numpy(dtype=float),
        enzyme_ng_per_ml=subjects["enzyme_ng_per_ml"].to_numpy(dtype=float),
        molar_mass_g_per_mol=np.array([np.nan if mass is None else mass for mass in masses]),
    )
    fitted = pd.concat([result.constants, derived], ignore_index=True)
    samples = [_of_sample(work, fitted, number) for number, work in enumerate(works)]
    by_sample = pd.concat(samples) if samples else fitted[:0]
    in_units = fitted[fitted["constant"] == SPECIFIC_ACTIVITY]
    nkat_per_u = float(nkat_from_u(np.ones(1))[0])
    in_katal = _scaled(in_units, f"{SPECIFIC_ACTIVITY}_katal", nkat_per_u, "nmol/s/mg")
    constants = pd.concat([fitted, in_katal, by_sample], ignore_index=True)
    return _with_calibration_error(constants, works)


def _of_sample(work: PlateWork, constants: pd.DataFrame, series: int) -> pd.DataFrame:
    """Activity of the undiluted sample at saturation, per mL and per mg of protein, where stated."""
    sample = work.recipe.assay.sample
    vmax = constants[(constants["series"] == series) & (constants["constant"] == VMAX)]
    if sample is None or vmax.empty:
        return vmax[:0]
    protein = np.nan if sample.protein_mg_per_ml is None else sample.protein_mg_per_ml
    one = activity(np.ones(1), sample.assay_volume_ul, sample.sample_volume_ul, sample.dilution, protein)
    rows = [
        _scaled(vmax, "volume_activity", float(one.u_per_ml[0]), "umol/min/mL"),
        _scaled(vmax, "volume_activity_katal", float(one.nkat_per_ml[0]), "nmol/s/mL"),
        _scaled(vmax, "sample_activity", float(one.u_per_mg[0]), "umol/min/mg"),
        _scaled(vmax, "sample_activity_katal", float(one.nkat_per_mg[0]), "nmol/s/mg"),
    ]
    return pd.concat([each for each in rows if each["value"].notna().all()], ignore_index=True)


def _scaled(constants: pd.DataFrame, name: str, factor: float, unit: str) -> pd.DataFrame:
    """The same constants in another unit: value, error and interval all scale."""
    numbers = {column: constants[column] * factor for column in ("value", "standard_error", "low", "high")}
    return constants.assign(constant=name, unit=unit, **numbers)


def _with_calibration_error(constants: pd.DataFrame, works: list[PlateWork]) -> pd.DataFrame:
    """Widen what is in proportion to product by the error that all wells of its plate share."""
    proportional = constants["unit"].isin(PROPORTIONAL_UNITS).to_numpy()
    series = constants["series"].to_numpy(dtype=np.intp)
    relative_error = np.array([work.conversion.relative_error_shared for work in works], dtype=float)
    of_assay = np.array([work.conversion.shared_by_assay for work in works], dtype=bool)
    shared = np.where(proportional, relative_error[series], 0.0) if len(works) else np.zeros(len(constants))
    value, error, low, high = (
        constants[name].to_numpy(dtype=float) for name in ("value", "standard_error", "low", "high")
    )
    widened = add_shared_error(value, error, low, high, shared)
    return constants.assign(
        standard_error=np.where(shared > 0, widened.standard_error, error),
        low=np.where(shared > 0, widened.low, low),
        high=np.where(shared > 0, widened.high, high),
        assay_relative_error=np.where(of_assay[series], shared, 0.0) if len(works) else shared,
    )
