"""Fits of arrays and data frames for notebooks: one set of rates in, a typed result out.

The same engine as the overnight pass, without plates or gates. This module reads no files.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike

from models.kinetics.fitting import reason_to_distrust
from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import LawFit
from models.kinetics.laws import RateLaw, law
from models.kinetics.laws.law import Constant, Floats
from models.kinetics.own_laws import OWN_RANK
from models.kinetics.packing import Packed, pack
from models.kinetics.refusals import Counts, Refusal, RefusalKind, refuse_fit, refuse_law, refuse_series
from models.kinetics.replicate_weights import Scatter, ScatterSource, fit_with_weights, plate_scatter
from models.kinetics.robust import Loss
from models.kinetics.selection import UNITS_OF_GRACE, aicc, evidence_weights
from models.kinetics.single_fit import Fit, FitRefused

__all__ = ["Fit", "FitRefused", "fit", "fit_michaelis_menten"]

Weights = Literal["equal", "replicates"]


def fit_michaelis_menten(substrate: ArrayLike, rate: ArrayLike) -> Fit:
    """Fit Michaelis-Menten with equal weights.

    Parameters
    ----------
    substrate, rate
        Shape (rates,), in any units; constants come out in the same.

    Raises
    ------
    FitRefused
        If the rates cannot be fitted; `kind` says why.

    Examples
    --------
    Wilkinson's worked example (1961, doi:10.1042/bj0800324), by full least squares:

    >>> from models.kinetics import fit_michaelis_menten
    >>> substrate = [0.138, 0.220, 0.291, 0.560, 0.766, 1.460]
    >>> found = fit_michaelis_menten(substrate, [0.148, 0.171, 0.234, 0.324, 0.390, 0.493])
    >>> found.table()[["value", "standard_error", "low", "high"]].round(4)
               value  standard_error    low    high
    constant
    vmax      0.6904          0.0368  0.5990  0.8107
    km        0.5965          0.0683  0.4336  0.8295
    >>> float(found.rate(1.0).round(4))
    0.4324
    """
    return fit(substrate, rate)


def fit(
    substrate: ArrayLike,
    rate: ArrayLike,
    laws: str | RateLaw | Sequence[str | RateLaw] = "michaelis_menten",
    *,
    data: pd.DataFrame | None = None,
    modulator: ArrayLike | None = None,
    enzyme: ArrayLike | None = None,
    standard_error: ArrayLike | None = None,
    further: Sequence[ArrayLike] = (),
    weights: Weights = "equal",
    loss: Loss = "none",
    concentration_unit: str = "umol/L",
    rate_unit: str = "umol/L/s",
) -> Fit:
    """Fit one set of rates with one law, or with several and choose by AICc.

    Parameters
    ----------
    substrate, rate
        Shape (rates,); column names where `data` is given. Rates that are NaN are left out.
    laws
        Names from the registry, or laws of `own_law`.
    data
        A frame to take columns from.
    modulator, enzyme
        Concentrations for laws that need them, arrays or column names; modulator 0 where there is none.
    standard_error
        Of each rate, array or column name; with `weights="replicates"` they are known beside the scatter of
        replicates, with `weights="equal"` they alone make the weights.
    further
        Other variables for a law of one's own.
    weights
        `equal`, or `replicates` for those of the overnight pass: from the scatter of replicates at equal
        levels, split between enzyme and substrate.
    loss
        `huber` or `tukey` give rates far from the fit less weight.
    concentration_unit, rate_unit
        Units of the data, for the table.

    Raises
    ------
    FitRefused
        If no law can be fitted; `kind` says why.
    UnknownName
        If a law is not in the registry.
    ValueError
        If the arrays do not match.

    Examples
    --------
    >>> import pandas as pd
    >>> from models.kinetics import fit
    >>> frame = pd.DataFrame({"s": [5.0, 10, 20, 40, 80, 160, 320], "v": [3.9, 13, 38, 71, 90, 97, 99]})
    >>> found = fit("s", "v", ["michaelis_menten", "hill"], data=frame)
    >>> found.law.name, found.trusted
    ('hill', True)
    >>> found.candidates["law"].tolist()
    ['michaelis_menten', 'hill']
    """
    candidates = [laws] if isinstance(laws, str | RateLaw) else list(laws)
    chosen_laws = [law(each) if isinstance(each, str) else each for each in candidates]
    packed = _packed(data, substrate, rate, modulator, enzyme, standard_error, further)
    refusal = _refuse_rates(packed, any_sign=all(each.rank >= OWN_RANK for each in chosen_laws))
    if refusal is not None:
        raise FitRefused(refusal.kind, refusal.reason)
    fitted: list[_Fitted] = []
    refusals: list[Refusal] = []
    for each in sorted(chosen_laws, key=lambda one: one.rank):
        found = _fitted(each, packed, weights, loss, known_errors=standard_error is not None)
        if isinstance(found, Refusal):
            refusals.append(found)
        else:
            fitted.append(found)
    if not fitted:
        raise FitRefused(refusals[0].kind, refusals[0].reason)
    return _result(fitted, packed, concentration_unit, rate_unit)


@dataclass(frozen=True)
class _Fitted:
    """One law on the rates: its fit, weights (rates, 1), and the ends of its intervals (constants, 1)."""

    fit: LawFit
    weights: Floats
    low: Floats
    high: Floats
    criterion: float


def _packed(
    data: pd.DataFrame | None,
    substrate: ArrayLike,
    rate: ArrayLike,
    modulator: ArrayLike | None,
    enzyme: ArrayLike | None,
    standard_error: ArrayLike | None,
    further: Sequence[ArrayLike],
) -> Packed:
    def column(values: ArrayLike) -> Floats:
        if isinstance(values, str):
            if data is None:
                raise ValueError(f"'{values}' names a column, but no data frame is given")
            if values not in data.columns:
                raise ValueError(f"the data frame has no column '{values}'")
            values = data[values].to_numpy()
        return np.asarray(values, dtype=np.float64).reshape(-1)

    rates = column(rate)
    given = {"substrate": substrate, "modulator": modulator, "enzyme": enzyme, "error": standard_error}
    given |= {f"further variable {number}": values for number, values in enumerate(further, start=1)}
    arrays = {name: column(values) for name, values in given.items() if values is not None}
    for name, values in arrays.items():
        if values.size == 1:
            arrays[name] = np.full(rates.size, values[0])
        elif values.size != rates.size:
            raise ValueError(f"{values.size} values of {name} do not go with {rates.size} rates")
    known = np.flatnonzero(np.isfinite(rates))
    cut = {name: values[known] for name, values in arrays.items()}
    packed = pack(
        np.zeros(known.size, dtype=np.intp),
        cut["substrate"],
        rates[known],
        cut.get("error", np.zeros(known.size)),
        cut.get("modulator"),
        cut.get("enzyme"),
    )
    others = tuple(packed.spread(cut[name]) for name in cut if name.startswith("further"))
    return replace(packed, conditions=replace(packed.conditions, further=others))


def _refuse_rates(packed: Packed, any_sign: bool) -> Refusal | None:
    here = packed.present[:, 0] if packed.series.size else np.zeros(0, dtype=bool)
    if not here.any():
        return Refusal(RefusalKind.NO_RATES, "no rate is known")
    modulator = packed.conditions.modulator_um
    refusal = refuse_series(
        packed.rate[:, 0],
        packed.standard_error[:, 0],
        packed.conditions.substrate_um[:, 0],
        None if modulator is None else modulator[:, 0],
    )
    if any_sign and refusal is not None and refusal.kind is RefusalKind.NO_POSITIVE_RATE:
        return None
    if refusal is None and not any_sign and np.any(packed.conditions.substrate_um < 0):
        return Refusal(RefusalKind.UNKNOWN_SUBSTRATE, "a substrate concentration is below zero")
    return refusal


def _counts(packed: Packed) -> Counts:
    modulator, enzyme = packed.conditions.modulator_um, packed.conditions.enzyme_um
    substrate = packed.conditions.substrate_um
    return Counts(
        # A rate at no substrate says nothing of half saturation.
        levels=int(np.unique(substrate[substrate != 0]).size),
        points=int(packed.rate.size),
        modulator_levels=1 if modulator is None else int(np.unique(modulator).size),
        enzyme_known=enzyme is not None and bool(np.all(np.isfinite(enzyme) & (enzyme > 0))),
    )


def _fitted(
    each: RateLaw, packed: Packed, weights: Weights, loss: Loss, known_errors: bool
) -> _Fitted | Refusal:
    problem = refuse_law(each, _counts(packed))
    if problem is not None:
        return problem
    if weights == "replicates":
        source = ScatterSource(each, packed, np.zeros(1, dtype=np.intp), packed.conditions.substrate_um)
        scatter = plate_scatter([source], 1)
    else:
        scatter = Scatter.of_constant(np.zeros(1))
        if not known_errors:
            packed = replace(packed, standard_error=np.ones_like(packed.rate))
    weighted = fit_with_weights(each, packed, scatter, loss=loss)
    fit = weighted.fit
    if each.rank < OWN_RANK:
        lower, upper = each.limits(packed.conditions, weighted.weights)
        half = each.coordinates(fit.constants[each.first_shape :])[0, 0]
        first = float(fit.constants[0, 0])
        problem = refuse_fit(
            each, first, float(half), float(lower[0, 0]), float(upper[0, 0]), bool(fit.converged[0])
        )
    elif not fit.converged[0]:
        problem = Refusal(RefusalKind.NOT_CONVERGED, f"the search for {each.title} did not come to rest")
    if problem is not None:
        return problem
    low, high = profile_intervals(fit, packed.conditions, packed.rate, weighted.weights)
    used = np.where(weighted.weights > 0, weighted.weights, 1.0)
    log_variance = -np.log(used).sum(axis=0)
    criterion = aicc(fit.residual_sum, log_variance, fit.point_count, each.constant_count)
    return _Fitted(fit, weighted.weights, low, high, float(criterion[0]))


def _result(fitted: Sequence[_Fitted], packed: Packed, concentration_unit: str, rate_unit: str) -> Fit:
    criteria = {each.fit.law.name: each.criterion for each in fitted}
    evidence = evidence_weights(criteria)
    known = [value for value in criteria.values() if np.isfinite(value)]
    bar = min(known) + UNITS_OF_GRACE if known else np.inf
    best = next((one for one in fitted if one.criterion <= bar), fitted[0])
    rows = []
    for one in fitted:
        reason = reason_to_distrust(one.fit, 0, one.low, one.high)
        name = one.fit.law.name
        rows.append((name, one is best, one.criterion, evidence[name], reason is None, reason))
    candidates = pd.DataFrame(
        rows, columns=["law", "chosen", "aicc", "evidence_weight", "trusted", "distrust"]
    )
    fit = best.fit

    def unit(constant: Constant) -> str:
        if constant is fit.law.amplitude and fit.law.rank < OWN_RANK:
            return rate_unit
        return concentration_unit if constant.is_concentration else constant.unit

    constants = pd.DataFrame(
        {
            "constant": [constant.name for constant in fit.law.constants],
            "value": fit.constants[:, 0],
            "standard_error": fit.standard_error[:, 0],
            "low": best.low[:, 0],
            "high": best.high[:, 0],
            "unit": [unit(constant) for constant in fit.law.constants],
        }
    )
    distrust = reason_to_distrust(fit, 0, best.low, best.high)
    return Fit(
        law=fit.law,
        constants=constants,
        covariance=fit.covariance[0],
        converged=bool(fit.converged[0]),
        trusted=distrust is None,
        distrust=distrust,
        residual_sum=float(fit.residual_sum[0]),
        degrees_of_freedom=int(fit.degrees_of_freedom[0]),
        candidates=candidates,
        conditions=packed.conditions,
        rates=packed.rate[:, 0],
        weights=best.weights[:, 0],
        law_fit=fit,
        rate_unit=rate_unit,
        concentration_unit=concentration_unit,
    )
