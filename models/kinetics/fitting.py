"""From rates to constants: every series of a batch fitted with its candidate laws, weighted, judged and
chosen.

Laws are fitted in batches, weights pooled plate by plate; what cannot be fitted becomes a refusal. This
module knows neither gates nor lots.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import product

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from models.kinetics.fit_points import FitPoints, fit_points
from models.kinetics.fit_results import (
    CONSTANT_COLUMNS,
    FIT_COLUMNS,
    POINT_COLUMNS,
    REFUSAL_COLUMNS,
    FitResult,
    joined,
)
from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import LawFit
from models.kinetics.laws import RateLaw, law
from models.kinetics.laws.law import Floats
from models.kinetics.packing import Packed
from models.kinetics.rate_rows import RateRows
from models.kinetics.refusals import Refusal, refuse_fit, refuse_law
from models.kinetics.replicate_weights import (
    Scatter,
    ScatterSource,
    WeightedFit,
    fit_with_weights,
    plate_scatter,
)
from models.kinetics.robust import LOSSES, Loss
from models.kinetics.selection import aicc, choose_law, evidence_weights
from models.statistics.sums import sum_rows

Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

BLOCK = 1024
"""Series worked on together at most, but for those of one plate."""


@dataclass(frozen=True)
class FitSettings:
    """How series are fitted, beside their candidate laws.

    Attributes
    ----------
    loss
        `none` for weighted least squares, `huber` or `tukey` to give rates far from the fit less weight; for
        all series, or one a series, by number.
    """

    loss: Loss | Sequence[Loss] = "none"

    def loss_of(self, series: Integers) -> NDArray[np.object_]:
        """Loss of some series, by number."""
        if isinstance(self.loss, str):
            return np.full(series.size, self.loss, dtype=object)
        return np.array(self.loss, dtype=object)[series]


@dataclass(frozen=True)
class _Candidate:
    """One law on one series, fitted."""

    fit: dict[str, object]
    constants: list[dict[str, object]]
    covariance: Floats


def fit_rates(
    rates: pd.DataFrame, series_laws: Sequence[tuple[str, ...]], settings: FitSettings | None = None
) -> FitResult:
    """Fit every series with each of its candidate laws.

    Parameters
    ----------
    rates
        Columns series, plate (integers), substrate_um (the mean over the window), nominal_substrate_um,
        v_um_per_s, v_se_um_per_s. Rates that are not known (NaN) and wells without substrate are left out.
        For laws with a modulator also modulator_um (0 where there is none), for tight binding enzyme_um.
    series_laws
        Names of the candidate laws of each series, by series number; a series without a row is refused.
    settings
        How to fit.

    Returns
    -------
    FitResult

    Raises
    ------
    UnknownName
        If a series names a law that is not in the registry.
    """
    settings = settings or FitSettings()
    blocks = _blocks(rates, len(series_laws))
    parts = [
        _fit_block(rates.iloc[places], places, series_laws, numbers, settings) for places, numbers in blocks
    ]
    return parts[0] if len(parts) == 1 else joined(parts)


def _blocks(rates: pd.DataFrame, series_count: int) -> list[tuple[Integers, list[int]]]:
    """Places of rows, and numbers of series, that are worked on together: whole plates, a bounded number of
    series each, so that memory is bounded and cost in proportion to their number. A series gives the same
    bits in any block."""
    places = np.arange(len(rates))
    if series_count <= BLOCK:
        return [(places, list(range(series_count)))]
    series, plate = (rates[name].to_numpy(dtype=np.intp) for name in ("series", "plate"))
    block_of_series = np.zeros(series_count, dtype=np.intp)
    member = series >= 0
    numbers, first = np.unique(series[member], return_index=True)
    plates, place_of_plate = np.unique(plate[member][first], return_inverse=True)
    filled = np.cumsum(np.bincount(place_of_plate, minlength=plates.size))
    block_of_series[numbers] = ((filled - 1) // BLOCK)[place_of_plate]
    block_of_row = np.where(member, block_of_series[np.maximum(series, 0)], -1)
    return [
        (places[block_of_row == block], np.flatnonzero(block_of_series == block).tolist())
        for block in np.unique(block_of_series)
    ]


def _fit_block(
    rates: pd.DataFrame,
    places: Integers,
    series_laws: Sequence[tuple[str, ...]],
    numbers: Sequence[int],
    settings: FitSettings,
) -> FitResult:
    """Fit some of the series; `places` are those of their rows in the whole frame."""
    names = sorted({name for n in numbers for name in series_laws[n]}, key=lambda name: law(name).rank)
    rows = RateRows.of(rates)
    refused = {number: refusal for number in numbers if (refusal := rows.refusal(number)) is not None}
    eligible: dict[str, list[int]] = {name: [] for name in names}
    reasons: dict[int, dict[str, Refusal]] = {}
    for number in numbers:
        if number in refused:
            continue
        counts = rows.counts(number)
        for name in series_laws[number]:
            refusal = refuse_law(law(name), counts)
            if refusal is None:
                eligible[name].append(number)
            else:
                reasons.setdefault(number, {})[name] = refusal
    scatter = _scatter_by_plate(rows, eligible)
    candidates: dict[int, dict[str, _Candidate]] = {}
    points: list[tuple[str, Packed, FitPoints]] = []
    for name, loss in product(names, LOSSES):
        series = np.array(eligible[name], dtype=np.intp)
        series = series[settings.loss_of(series) == loss]
        if series.size == 0:
            continue
        packed = rows.packed(series)
        fitted, failed, points_of = _fit_candidates(law(name), packed, rows, scatter, loss)
        points.append((name, packed, points_of))
        for number, candidate in fitted.items():
            candidates.setdefault(number, {})[name] = candidate
        for number, refusal in failed.items():
            reasons.setdefault(number, {})[name] = refusal
    for number in numbers:
        if number not in candidates and number not in refused:
            refused[number] = _first_reason(series_laws[number], reasons.get(number, {}))
    return _result(candidates, refused, rows, scatter, _Points(rates.index, places, rows, points))


def _first_reason(laws: tuple[str, ...], reasons: Mapping[str, Refusal]) -> Refusal:
    return next(reasons[name] for name in sorted(laws, key=lambda name: law(name).rank) if name in reasons)


def _scatter_by_plate(rows: RateRows, eligible: Mapping[str, list[int]]) -> Scatter:
    """Replicate scatter of each plate, each series about the law with most constants that it may have.

    A law too rich does no harm here: replicates share its value, and only its slope in substrate counts.
    """
    richest: dict[int, str] = {}
    for name in sorted(eligible, key=lambda name: (law(name).constant_count, law(name).rank)):
        richest.update(dict.fromkeys(eligible[name], name))
    sources = []
    for name in sorted(set(richest.values())):
        packed = rows.packed(np.array([n for n, of in richest.items() if of == name], dtype=np.intp))
        level = packed.spread(rows.level_um)
        sources.append(ScatterSource(law(name), packed, rows.plate_of(packed.series), level))
    if not sources:
        return Scatter.of_constant(np.zeros(rows.plates.size))
    return plate_scatter(sources, rows.plates.size)


def _fit_candidates(
    each: RateLaw, packed: Packed, rows: RateRows, scatter: Scatter, loss: Loss
) -> tuple[dict[int, _Candidate], dict[int, Refusal], FitPoints]:
    of_plate = scatter.select(rows.plate_of(packed.series))
    weighted = fit_with_weights(each, packed, of_plate, loss=loss)
    fit = weighted.fit
    low, high = profile_intervals(fit, packed.conditions, packed.rate, weighted.weights)
    criterion = _aicc(packed, weighted)
    limits = each.limits(packed.conditions, weighted.weights)
    half = each.coordinates(fit.constants[each.first_shape :])[0]
    points = fit_points(packed, weighted, packed.spread(rows.level_um))
    fitted, failed = {}, {}
    for column, number in enumerate(packed.series):
        refusal = refuse_fit(
            each,
            float(fit.constants[0, column]),
            float(half[column]),
            float(limits[0][0, column]),
            float(limits[1][0, column]),
            bool(fit.converged[column]),
        )
        if refusal is not None:
            failed[int(number)] = refusal
            continue
        fitted[int(number)] = _candidate(int(number), fit, column, low, high, float(criterion[column]))
        fitted[int(number)].fit["lack_of_fit_p"] = float(points.lack_of_fit_p[column])
        fitted[int(number)].fit["runs_p"] = float(points.runs_p[column])
    return fitted, failed, points


def _aicc(packed: Packed, weighted: WeightedFit) -> Floats:
    log_variance = -np.log(np.where(weighted.weights > 0, weighted.weights, 1.0))
    fit = weighted.fit
    return aicc(fit.residual_sum, sum_rows(log_variance), fit.point_count, fit.law.constant_count)


def _candidate(
    number: int, fit: LawFit, column: int, low: Floats, high: Floats, criterion: float
) -> _Candidate:
    distrust = reason_to_distrust(fit, column, low, high)
    errors = fit.standard_error[:, column]
    row = {
        "series": number,
        "law": fit.law.name,
        "converged": bool(fit.converged[column]),
        "trusted": distrust is None,
        "distrust": distrust,
        "point_count": int(fit.point_count[column]),
        "degrees_of_freedom": int(fit.degrees_of_freedom[column]),
        "weighted_residual_sum": float(fit.residual_sum[column]),
        "aicc": criterion,
    }
    constants = [
        {
            "series": number,
            "law": fit.law.name,
            "constant": constant.name,
            "value": float(fit.constants[k, column]),
            "standard_error": float(errors[k]),
            "low": float(low[k, column]),
            "high": float(high[k, column]),
            "unit": constant.unit,
        }
        for k, constant in enumerate(fit.law.constants)
    ]
    return _Candidate(row, constants, fit.covariance[column])


def reason_to_distrust(fit: LawFit, column: int, low: Floats, high: Floats) -> str | None:
    """Why the uncertainty of a fit that converged cannot be trusted, or None."""
    if not fit.full_rank[column]:
        return "the data do not tell the constants apart"
    if fit.at_limit[column]:
        return "a constant lies at its limit"
    ends = ((low, "below"), (high, "above"))
    is_open = [
        f"{constant.name} is open {side}"
        for k, constant in enumerate(fit.law.constants)
        for values, side in ends
        if not np.isfinite(values[k, column])
    ]
    return ", ".join(is_open) if is_open else None


@dataclass(frozen=True)
class _Points:
    """Rates of every law's fits, and the frame that they came from."""

    index: pd.Index
    places: Integers
    rows: RateRows
    of_fits: Sequence[tuple[str, Packed, FitPoints]]

    def of_chosen(self, chosen: Mapping[int, str]) -> pd.DataFrame:
        """Points of the law chosen for each series, in the order of the frame."""
        parts = []
        for name, packed, points in self.of_fits:
            mine = np.array([chosen.get(int(number)) == name for number in packed.series], dtype=bool)
            place, column = np.nonzero(packed.present & mine)
            row = packed.row[place, column]
            frame = pd.DataFrame(
                {
                    "place": self.places[self.rows.place[row]],
                    "series": packed.series[column],
                    "law": name,
                    "row": self.index[self.rows.place[row]],
                    "substrate_um": packed.conditions.substrate_um[place, column],
                    "v_um_per_s": packed.rate[place, column],
                    "fitted_um_per_s": points.fitted[place, column],
                    "v_sd_um_per_s": points.standard_deviation[place, column],
                    "leverage": points.leverage[place, column],
                    "studentised_residual": points.studentised[place, column],
                }
            )
            parts.append(frame)
        if not parts:
            return pd.DataFrame({name: np.empty(0) for name in POINT_COLUMNS})
        in_order = pd.concat(parts, ignore_index=True).sort_values("place", ignore_index=True)
        return in_order[list(POINT_COLUMNS)]


def _result(
    candidates: Mapping[int, dict[str, _Candidate]],
    refused: Mapping[int, Refusal],
    rows: RateRows,
    scatter: Scatter,
    points: _Points,
) -> FitResult:
    fits: list[dict[str, object]] = []
    constants: list[dict[str, object]] = []
    covariance: dict[tuple[int, str], Floats] = {}
    for number in sorted(candidates):
        of_series = candidates[number]
        criteria = {name: float(str(each.fit["aicc"])) for name, each in of_series.items()}
        chosen, evidence = choose_law(criteria), evidence_weights(criteria)
        for name, each in of_series.items():
            fits.append({**each.fit, "chosen": name == chosen, "evidence_weight": evidence[name]})
            constants.extend({**row, "chosen": name == chosen} for row in each.constants)
            covariance[number, name] = each.covariance
    refusals = [
        {"series": number, "kind": str(refusal.kind), "reason": refusal.reason}
        for number, refusal in sorted(refused.items())
    ]
    return FitResult(
        pd.DataFrame(fits, columns=list(FIT_COLUMNS)),
        pd.DataFrame(constants, columns=list(CONSTANT_COLUMNS)),
        pd.DataFrame(refusals, columns=list(REFUSAL_COLUMNS)),
        points.of_chosen({int(str(fit["series"])): str(fit["law"]) for fit in fits if fit["chosen"]}),
        covariance,
        dict(zip(rows.plates.tolist(), scatter.constant_cv.tolist(), strict=True)),
        dict(zip(rows.plates.tolist(), scatter.substrate_cv.tolist(), strict=True)),
    )
