"""The lag or burst of each well of a plate read, with the loss of substrate taken out of its curve.

An exponential would take up depletion as part of a burst, so product is first turned into what it would be at
constant substrate. This module chooses no window and finds no curvature: it is told which wells have some.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.prediction import SeriesCourse
from models.kinetics.transients import Transients, fit_transients

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

STEADY_SHARE = 0.15
"""A burst goes on at more than this share of its first rate; what falls further is falling."""


@dataclass(frozen=True)
class Slowing:
    """How the rate of each well falls while product forms; arrays (wells,).

    v(S) / v(S - p) = 1 + linear p + square p^2, with S the substrate where p is 0: by it product becomes what
    it would be at constant substrate, the integral of that ratio over p.
    """

    linear: Floats
    square: Floats

    def at(self, product_um: Floats) -> Floats:
        """The ratio at each read, shape as given."""
        return 1.0 + product_um * (self.linear + self.square * product_um)

    def undepleted(self, product_um: Floats) -> Floats:
        """Product as it would be at constant substrate [umol/L], shape as given."""
        return product_um * self._stretch(product_um)

    def depleted(self, undepleted_um: Floats) -> Floats:
        """The inverse of `undepleted`, for products of a few percent of the substrate."""
        product = undepleted_um
        for _ in range(4):
            product = undepleted_um / self._stretch(product)
        return product

    def _stretch(self, product_um: Floats) -> Floats:
        return 1.0 + product_um * (self.linear / 2.0 + self.square / 3.0 * product_um)


def slowing(course: SeriesCourse, substrate_um: Floats, ceiling_um: Floats) -> Slowing:
    """How depletion slows each well, from the law and the constants of its series.

    Parameters
    ----------
    course
        What the series' fits predict; only the shape of their law counts here, not its height.
    substrate_um
        Substrate where product is 0 [umol/L], shape (wells,).
    ceiling_um
        Product up to which it must hold [umol/L], shape (wells,).

    Returns
    -------
    Slowing
        None at all (1) where no course is known or nothing can be consumed.
    """
    half = 0.5 * np.minimum(ceiling_um, 0.5 * substrate_um)
    with np.errstate(all="ignore"):
        start = course.rate(substrate_um)
        middle = start / course.rate(substrate_um - half) - 1.0
        end = start / course.rate(substrate_um - 2.0 * half) - 1.0
        linear, square = (4.0 * middle - end) / (2.0 * half), (end - 2.0 * middle) / (2.0 * half * half)
    held = course.known & np.isfinite(linear) & np.isfinite(square)
    return Slowing(np.where(held, linear, 0.0), np.where(held, square, 0.0))


@dataclass(frozen=True)
class Settling:
    """Transients of some wells of a plate read.

    Attributes
    ----------
    wells
        Which wells, rising; everything below is in their order.
    fits
        Their transients at the substrate where product is 0.
    slowed
        How depletion slows them.
    influence
        How far v0, vs and k move with each read of product itself, shape (3, reads, wells).
    first_um
        Product at the first usable read by the fit, above where it is 0 [umol/L], shape (wells,).
    """

    wells: Integers
    fits: Transients
    slowed: Slowing
    influence: Floats
    first_um: Floats

    def scale_at(self, product_um: Floats) -> Floats:
        """What v0 and vs are multiplied with where so much product has formed, shape (wells,)."""
        scale: Floats = 1.0 / self.slowed.at(product_um)
        return scale


def goes_on(fits: Transients) -> Flags:
    """Whether a slowing curve settles to a steady rate instead of falling on, shape (wells,)."""
    v0, vs = fits.v0_um_per_s, fits.vs_um_per_s
    with np.errstate(invalid="ignore"):
        going: Flags = (v0 > 0) & (vs > STEADY_SHARE * v0)
    return going


def fit_settling(
    time_s: Floats, product_um: Floats, used: Flags, slowed: Slowing, wells: Integers
) -> Settling:
    """Fit the transient of some wells over the reads before their conversion limit.

    Parameters
    ----------
    time_s, product_um
        Shape (reads, all wells); product counts from where `slowed` says that it is 0.
    used
        Reads that may be used, shape (reads, all wells).
    slowed
        How depletion slows each well.
    wells
        Wells to fit.

    Returns
    -------
    Settling
    """
    product = np.where(used, product_um, np.nan)[:, wells]
    mine = Slowing(slowed.linear[wells], slowed.square[wells])
    fits = fit_transients(time_s[:, wells], mine.undepleted(product))
    return Settling(
        wells,
        fits,
        mine,
        fits.influence * np.where(np.isfinite(product), mine.at(product), 1.0),
        mine.depleted(fits.p0_um),
    )
