"""Whether a constant really shifts with a modulator: separate fits of each modulator level against fits that
share the constant.

Vmax is always free at each level. This module makes no weights of its own and chooses no law.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy.optimize import least_squares
from scipy.stats import f as f_distribution

from models.errors import UnknownName
from models.kinetics.fit_results import FitResult
from models.kinetics.fitting import FitSettings, fit_rates
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import Conditions, RateLaw, at_levels, law
from models.kinetics.laws.law import Floats
from models.kinetics.packing import pack
from models.kinetics.replicate_weights import Scatter, fit_with_weights

SIGNIFICANCE = 0.05


@dataclass(frozen=True)
class Group:
    """Rates of one modulator level: conditions, rates and weights, each of shape (points, 1)."""

    conditions: Conditions
    rates: Floats
    weights: Floats


@dataclass(frozen=True)
class SharedTest:
    """Separate against shared constants.

    Attributes
    ----------
    shared
        Names of the constants that the simpler fit shares over all groups.
    f_value, numerator_degrees, denominator_degrees, p_value
        F test of the rise in the weighted sum of squares (Bates and Watts 1988, doi:10.1002/9780470316757,
        section 3.10).
    separate_sum, shared_sum
        Weighted sums of squared residuals.
    separate, together
        Constants of each group, in the law's order, shape (constants, groups), of either fit.
    """

    shared: tuple[str, ...]
    f_value: float
    numerator_degrees: int
    denominator_degrees: int
    p_value: float
    separate_sum: float
    shared_sum: float
    separate: Floats
    together: Floats

    @property
    def is_real(self) -> bool:
        """Whether the shared constants differ between groups beyond chance, at 5 %."""
        return self.p_value < SIGNIFICANCE


def compare_shared(each: RateLaw, groups: Sequence[Group], shared: Sequence[str]) -> SharedTest:
    """Fit groups separately and with shared constants, and test the difference.

    Parameters
    ----------
    each
        The rate law; its amplitude is free in every group.
    groups
        At least two.
    shared
        Names of shape constants.

    Raises
    ------
    UnknownName
        If the law has no such shape constant.
    ValueError
        If there are fewer than two groups, or no rates beyond the constants.
    """
    names = [constant.name for constant in each.shape_constants]
    for name in shared:
        if name not in names:
            raise UnknownName(
                f"{each.title} has no constant '{name}' to share", remedy=f"it has {', '.join(names)}"
            )
    if len(groups) < 2:
        raise ValueError(f"{len(groups)} group of rates; sharing needs at least two")
    fits = [fit_law(each, group.conditions, group.rates, group.weights) for group in groups]
    separate = np.concatenate([fit.constants for fit in fits], axis=1)
    separate_sum = float(sum(fit.residual_sum[0] for fit in fits))
    points = int(sum(np.count_nonzero(group.weights > 0) for group in groups))
    degrees = points - each.constant_count * len(groups)
    if degrees <= 0:
        raise ValueError(f"{points} rates do not outnumber the constants of {len(groups)} groups")
    problem = _Shared(each, groups, [names.index(name) for name in shared])
    start = each.coordinates(separate[each.first_shape :])
    together, shared_sum = problem.fit(start)
    saved = len(shared) * (len(groups) - 1)
    f_value = (max(shared_sum - separate_sum, 0.0) / saved) / (separate_sum / degrees)
    return SharedTest(
        tuple(shared),
        f_value,
        saved,
        degrees,
        float(f_distribution.sf(f_value, saved, degrees)),
        separate_sum,
        shared_sum,
        separate,
        together,
    )


class _Shared:
    """Least squares with some shape constants shared, every group's amplitude eliminated."""

    def __init__(self, each: RateLaw, groups: Sequence[Group], shared: list[int]) -> None:
        self._law, self._groups = each, groups
        self._place = np.empty((len(each.shape_constants), len(groups)), dtype=np.intp)
        count = 0
        for row in range(len(each.shape_constants)):
            own = np.zeros(len(groups), dtype=np.intp) if row in shared else np.arange(len(groups))
            self._place[row] = count + own
            count += int(own.max()) + 1
        self._count = count

    def fit(self, start: Floats) -> tuple[Floats, float]:
        """Constants (constants, groups) and the sum of squares, from coordinates of each group.

        Tries the mean start and each group's own, since a shared constant may lie near any of them.
        """
        best = None
        for candidate in (
            np.mean(start, axis=1, keepdims=True),
            *(start[:, [g]] for g in range(start.shape[1])),
        ):
            first = np.zeros(self._count)
            first[self._place] = np.where(self._is_shared()[:, None], candidate, start)
            found = least_squares(
                self._residuals, first, jac=self._jacobian, x_scale="jac", xtol=1e-14, ftol=1e-14, gtol=1e-14
            )
            if best is None or found.cost < best.cost:
                best = found
        assert best is not None
        coordinates = best.x[self._place]
        values = np.array(self._law.values(coordinates))
        if self._law.amplitude is not None:
            values = np.vstack([self._solve(best.x)[2], values])
        return values, float(2.0 * best.cost)

    def _residuals(self, x: Floats) -> Floats:
        return self._solve(x)[0]

    def _jacobian(self, x: Floats) -> Floats:
        return self._solve(x)[1]

    def _is_shared(self) -> np.ndarray:
        return np.array([np.unique(row).size == 1 for row in self._place])

    def _solve(self, x: Floats) -> tuple[Floats, Floats, Floats]:
        residuals, rows, amplitudes = [], [], []
        for number, group in enumerate(self._groups):
            places = self._place[:, number]
            shape, slopes = self._law.evaluate(group.conditions, self._law.values(x[places][:, None]))
            root = np.sqrt(group.weights[:, 0])
            column, target = root * shape[:, 0], root * group.rates[:, 0]
            derivatives = np.stack([root * slope[:, 0] for slope in slopes], axis=1)
            best = 1.0
            if self._law.amplitude is not None:
                square = float(column @ column)
                best = float(column @ target) / square
                derivatives = derivatives - np.outer(column, column @ derivatives) / square
            block = np.zeros((column.size, self._count))
            block[:, places] = -best * derivatives
            residuals.append(target - best * column)
            rows.append(block)
            amplitudes.append(best)
        return np.concatenate(residuals), np.concatenate(rows), np.array(amplitudes)


@dataclass(frozen=True)
class Shift:
    """How the constants of a lot go with the modulator.

    Attributes
    ----------
    modulator_um
        Modulator levels [umol/L], shape (levels,).
    fits
        Separate fits; series number k is the level of `modulator_um[k]`.
    tests
        A test for each shape constant shared alone, and for all of them together.
    """

    modulator_um: Floats
    fits: FitResult
    tests: tuple[SharedTest, ...]


def modulator_shift(
    rates: pd.DataFrame, law_name: str = "hill", settings: FitSettings | None = None
) -> Shift:
    """Fit a lot's series at every modulator level and test whether their constants differ.

    Parameters
    ----------
    rates
        As for `fit_rates`, of one lot and enzyme level, with modulator_um [umol/L]; `series` is not used.
    law_name
        Law of the series, without a modulator of its own.
    settings
        How to fit.

    Returns
    -------
    Shift
        Weights of the tests are those of the separate fits. Levels that cannot be fitted are refused in
        `fits` and left out of the tests; with fewer than two, there is no test.

    Raises
    ------
    UnknownName
        If there is no such law.
    """
    each = law(law_name)
    levels, number = np.unique(rates["modulator_um"].to_numpy(dtype=np.float64), return_inverse=True)
    frame = rates.assign(series=np.asarray(number).reshape(-1)).drop(columns="modulator_um")
    result = fit_rates(frame, [(law_name,)] * levels.size, settings)
    fitted = result.fits["series"].to_numpy(dtype=np.intp)
    groups = [_group(each, frame[frame["series"] == one], result) for one in fitted]
    names = [constant.name for constant in each.shape_constants]
    choices = [(name,) for name in names] + ([tuple(names)] if len(names) > 1 else [])
    tests = tuple(compare_shared(each, groups, choice) for choice in choices) if len(groups) > 1 else ()
    return Shift(levels, result, tests)


def _group(each: RateLaw, frame: pd.DataFrame, result: FitResult) -> Group:
    known = frame[frame["v_um_per_s"].notna() & (frame["substrate_um"] > 0)]
    columns = ("substrate_um", "v_um_per_s", "v_se_um_per_s")
    packed = pack(np.zeros(len(known), dtype=np.intp), *(known[c].to_numpy(np.float64) for c in columns))
    plate = int(known["plate"].iloc[0])
    scatter = Scatter(np.array([result.plate_cv[plate]]), np.array([result.substrate_cv[plate]]))
    weights = fit_with_weights(each, packed, scatter).weights
    return Group(at_levels(packed.conditions.substrate_um), packed.rate, weights)
