"""Where replicate scatter comes from: a constant part (enzyme pipetted) and a part through the substrate.

A relative error e of the substrate moves a rate by e dlnv/dlnS, one of the enzyme by e, so that

    variance = standard_error^2 + rate^2 (constant_cv^2 + substrate_cv^2 (dlnv/dlnS)^2).

    replicate_variance_components(plate, group, residual, size, order, standard_error, plate_count)
        -> VarianceComponents(constant_cv, substrate_cv, degrees_of_freedom, separable), one value a plate
    rate_variance(standard_error, size, order, constant_cv, substrate_cv) -> variance of each rate

This module knows neither rate laws nor wells: `order` = dlnv/dlnS, the apparent order in substrate, is given.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

PRIOR_DEGREES = 4.0
"""Degrees of freedom that "both parts are equal" counts for. One triplicate series of 8 levels has 16:
without it one part is often found to be 0, the weights become extreme, and 95 % intervals cover 91 to 94 %
(simulated Hill and Michaelis-Menten series); with it 94 to 96 %."""

_LARGEST_CV = 2.0
_ROUNDS = 200
_HALVINGS = 12
_SETTLED = 1e-11
_ROUNDING = 1e-12
_LEAST_INDEPENDENCE = 0.02
"""Share of a plate's information on the substrate part that must be its own, not shared with the constant
part, for the two to be told apart; below it, the variance of the split is fifty times that of the sum."""


@dataclass(frozen=True)
class VarianceComponents:
    """Coefficients of variation beyond the rates' own standard errors, one a plate.

    Attributes
    ----------
    constant_cv
        Of what acts on every rate alike, such as the volume of enzyme [1], shape (plates,).
    substrate_cv
        Of the substrate in the well [1], shape (plates,).
    degrees_of_freedom
        Replicates less groups, shape (plates,); with 0 both coefficients are 0 and mean nothing.
    separable
        Whether the plate's levels tell the two apart, shape (plates,). Where they do not, only the sum at the
        levels that have replicates is known, and the two are equal.
    """

    constant_cv: Floats
    substrate_cv: Floats
    degrees_of_freedom: Floats
    separable: Flags


def rate_variance(
    standard_error: Floats, size: Floats, order: Floats, constant_cv: Floats, substrate_cv: Floats
) -> Floats:
    """Variance of rates [umol2/L2/s2] from standard error and both components; arrays that broadcast.

    Parameters
    ----------
    standard_error, size
        Of each rate and the rate as fitted [umol/L/s].
    order
        dlnv/dlnS at each rate [1]: S/v dv/dS. It is Km/(Km + S) for Michaelis-Menten.
    constant_cv, substrate_cv
        Coefficients of variation [1].
    """
    variance: Floats = standard_error**2 + size**2 * (constant_cv**2 + (substrate_cv * order) ** 2)
    return variance


def replicate_variance_components(
    plate: Integers,
    group: Integers,
    residual: Floats,
    size: Floats,
    order: Floats,
    standard_error: Floats,
    plate_count: int,
    prior_degrees: float = PRIOR_DEGREES,
) -> VarianceComponents:
    """Estimate both components from replicates, pooled over each plate.

    Restricted likelihood within the groups (Patterson and Thompson 1971, doi:10.1093/biomet/58.3.545) with a
    ridge that draws both squared coefficients to the value at which, being equal, they explain the plate's
    scatter: it decides where replicates are few and yields where they are many. Newton's method, or Fisher
    scoring where that would not climb, each step a non-negative least-squares problem in the two squares. An
    error that all replicates of a level share, as of the stock they are drawn from, is not seen here.

    Parameters
    ----------
    plate, group
        Plate and replicate group of each rate, counted from 0, shape (n,). Groups may not span plates. The
        rows of a plate must come in an order that does not depend on the batch.
    residual
        Rate less its fitted value [umol/L/s], shape (n,).
    size, order
        Fitted rate [umol/L/s] and dlnv/dlnS [1] at each rate, shape (n,).
    standard_error
        Of each rate [umol/L/s], shape (n,).
    plate_count
        Number of plates.
    prior_degrees
        Degrees of freedom that the ridge counts for; 0 for the restricted likelihood alone.

    Returns
    -------
    VarianceComponents
    """
    problem = _Problem.of(plate, group, residual, size, order, standard_error, plate_count)
    centre = problem.equal_parts()
    scattered = centre > 0
    squares = problem.maximise(np.where(scattered, centre, 1.0), scattered, prior_degrees)
    squares = np.where(scattered, squares, 0.0)
    separable = scattered & (problem.independence(squares) >= _LEAST_INDEPENDENCE)
    cv = np.sqrt(squares)
    return VarianceComponents(cv[0], cv[1], problem.degrees, separable)


@dataclass(frozen=True)
class _Problem:
    """Replicates of a batch of plates, with what their likelihood needs."""

    plate: Integers
    group: Integers
    residual: Floats
    variance: Floats
    loads: Floats
    floor: Floats
    degrees: Floats

    @classmethod
    def of(
        cls,
        plate: Integers,
        group: Integers,
        residual: Floats,
        size: Floats,
        order: Floats,
        standard_error: Floats,
        plate_count: int,
    ) -> _Problem:
        # A rate without a replicate says nothing of scatter.
        kept = np.bincount(group)[group] > 1 if group.size else np.zeros(0, dtype=bool)
        _, numbers = np.unique(group[kept], return_inverse=True)
        members = np.bincount(numbers)[numbers].astype(np.float64)
        scale = size[kept] ** 2
        return cls(
            plate=plate[kept],
            group=numbers,
            residual=residual[kept],
            variance=standard_error[kept] ** 2,
            loads=np.stack([scale, scale * order[kept] ** 2]),
            # Rates without any error of their own would else weigh infinitely much where both parts are 0.
            floor=np.maximum(1e-24 * scale, 1e-150),
            degrees=np.round(_sums(plate[kept], 1.0 - 1.0 / members, plate_count)),
        )

    @property
    def plate_count(self) -> int:
        return int(self.degrees.size)

    def weights(self, squares: Floats) -> Floats:
        """One over the variance of each rate for the squared coefficients (2, plates)."""
        of_rate = squares[:, self.plate]
        variance = self.variance + self.loads[0] * of_rate[0] + self.loads[1] * of_rate[1]
        weight: Floats = 1.0 / np.maximum(variance, self.floor)
        return weight

    def loss(self, squares: Floats) -> Floats:
        """Minus twice the restricted log-likelihood of each plate, up to a constant."""
        weight = self.weights(squares)
        total = self._by_group(weight)
        mean = self._by_group(weight * self.residual) / total
        terms = weight * (self.residual - mean[self.group]) ** 2 - np.log(weight)
        share = weight / total[self.group]
        return self._by_plate(terms + share * np.log(total)[self.group])

    def score(self, squares: Floats) -> Floats:
        """Minus the derivative of the loss by each squared coefficient, shape (2, plates)."""
        weight = self.weights(squares)
        total = self._by_group(weight)
        share = weight / total[self.group]
        centred = self.residual - (self._by_group(weight * self.residual) / total)[self.group]
        pull = weight**2 * centred**2 - weight * (1.0 - share)
        return np.stack([self._by_plate(load * pull) for load in self.loads])

    def information(self, squares: Floats) -> Floats:
        """Expected second derivative of the loss, shape (2, 2, plates)."""
        weight = self.weights(squares)
        total = self._by_group(weight)[self.group]
        own = weight**2 * (1.0 - 2.0 * weight / total)
        mass = [self._by_group(weight**2 * load)[self.group] / total for load in self.loads]
        members = np.bincount(self.group)[self.group]
        information = np.empty((2, 2, self.plate_count))
        for first in range(2):
            for second in range(first, 2):
                terms = self.loads[first] * self.loads[second] * own + mass[first] * mass[second] / members
                information[first, second] = information[second, first] = self._by_plate(terms)
        return information

    def curvature(self, squares: Floats) -> Floats:
        """Second derivative of the loss as observed, shape (2, 2, plates): its steps settle in few rounds."""
        weight = self.weights(squares)
        total = self._by_group(weight)
        centred = self.residual - (self._by_group(weight * self.residual) / total)[self.group]
        pulls = [load * weight * centred for load in self.loads]
        means = [(self._by_group(weight * pull) / total)[self.group] for pull in pulls]
        curvature = -self.information(squares)
        for first in range(2):
            for second in range(2):
                about_mean = (pulls[first] - means[first]) * (pulls[second] - means[second])
                curvature[first, second] += 2.0 * self._by_plate(weight * about_mean)
        return curvature

    def equal_parts(self) -> Floats:
        """Square that both coefficients have if they are equal, shape (plates,); 0 where there is no
        scatter."""
        low, high = np.zeros(self.plate_count), np.full(self.plate_count, _LARGEST_CV**2)

        def slope(square: Floats) -> Floats:
            both: Floats = np.sum(self.score(np.stack([square, square])), axis=0)
            return both

        none = (self.degrees == 0) | (slope(low) <= 0)
        # A geometric search: squares of coefficients span many powers of ten.
        low = np.full(self.plate_count, 1e-24)
        for _ in range(100):
            middle = np.sqrt(low * high)
            above = slope(middle) > 0
            low, high = np.where(above, middle, low), np.where(above, high, middle)
        return np.where(none, 0.0, np.sqrt(low * high))

    def maximise(self, centre: Floats, moving: Flags, prior_degrees: float) -> Floats:
        """Squared coefficients (2, plates) of the highest penalised likelihood.

        Every plate moves and stops by its own measure alone, so that its result does not depend on the batch.
        """
        hold = prior_degrees / (2.0 * centre**2)

        def total_loss(squares: Floats) -> Floats:
            prior = hold * ((squares[0] - centre) ** 2 + (squares[1] - centre) ** 2)
            loss: Floats = self.loss(squares) + prior
            return loss

        squares = np.stack([centre, centre])
        best = total_loss(squares)
        for _ in range(_ROUNDS):
            if not moving.any():
                break
            score = self.score(squares) + 2.0 * hold * (centre - squares)
            (aa, ab), (_, bb) = self._bowl(squares, hold)
            wanted_a = aa * squares[0] + ab * squares[1] + score[0]
            wanted_b = ab * squares[0] + bb * squares[1] + score[1]
            step = _non_negative(aa, ab, bb, wanted_a, wanted_b) - squares
            fraction = np.where(moving, 1.0, 0.0)
            trial, loss = squares + fraction * step, best
            # Near the top the loss is flat to its last digits, while the step still has a direction.
            slack = _ROUNDING * (1.0 + np.abs(best))
            for _ in range(_HALVINGS):
                loss = total_loss(trial)
                worse = loss > best + slack
                if not worse.any():
                    break
                fraction = np.where(worse, 0.5 * fraction, fraction)
                trial = squares + fraction * step
            better = loss <= best + slack
            moving = moving & better & (np.max(np.abs(fraction * step), axis=0) > _SETTLED * centre)
            squares, best = np.where(better, trial, squares), np.where(better, loss, best)
        return squares

    def _bowl(self, squares: Floats, hold: Floats) -> Floats:
        """Second derivative of the penalised loss: as observed if that curves upwards, else as expected."""
        ridge = 2.0 * hold * np.eye(2)[:, :, None]
        observed, expected = self.curvature(squares) + ridge, self.information(squares) + ridge
        (aa, ab), (_, bb) = observed
        return np.where((aa > 0) & (bb > 0) & (aa * bb - ab * ab > 0.01 * aa * bb), observed, expected)

    def independence(self, squares: Floats) -> Floats:
        """Share of the information on the substrate part that the constant part does not share, 0 to 1."""
        information = self.information(squares)
        with np.errstate(all="ignore"):
            own = 1.0 - information[0, 1] ** 2 / (information[0, 0] * information[1, 1])
        return np.where(np.isfinite(own), own, 0.0)

    def _by_group(self, values: Floats) -> Floats:
        return _sums(self.group, values, int(self.group.max(initial=-1)) + 1)

    def _by_plate(self, values: Floats) -> Floats:
        return _sums(self.plate, values, self.plate_count)


def _non_negative(aa: Floats, ab: Floats, bb: Floats, wanted_a: Floats, wanted_b: Floats) -> Floats:
    """Least squares in two unknowns, neither below 0, shape (2, plates)."""
    determinant = aa * bb - ab * ab
    with np.errstate(all="ignore"):
        first = (bb * wanted_a - ab * wanted_b) / determinant
        second = (aa * wanted_b - ab * wanted_a) / determinant
    alone = np.stack([np.maximum(wanted_a / aa, 0.0), np.maximum(wanted_b / bb, 0.0)])
    none = np.zeros_like(aa)
    at_edge = np.where(
        aa * alone[0] ** 2 >= bb * alone[1] ** 2, np.stack([alone[0], none]), np.stack([none, alone[1]])
    )
    return np.where((first >= 0) & (second >= 0), np.stack([first, second]), at_edge)


def _sums(index: Integers, values: Floats, count: int) -> Floats:
    """Sum of the values of each index, added one after another in the order of the rows."""
    return np.bincount(index, values, minlength=count).astype(np.float64)
