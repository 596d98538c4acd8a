"""The integrated Michaelis-Menten law in closed form: product, substrate left, and their derivatives.

The one definition of the law for fitting and for simulation. Knows no wells, no noise and no data.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import exprel, wrightomega

Floats = NDArray[np.float64]

_POLISHES = 3
"""Halley steps after the start: two reach rounding nearly everywhere, four do in every corner that the tests
look into. A fixed number, so that a value does not depend on what else is in the array."""
_SERIES_BELOW = 1.0
_SERIES_TERMS = 20
_SPLITTER = 134217729.0


@dataclass(frozen=True)
class Progress:
    """A reaction under way; arrays of the broadcast shape of what was asked.

    Attributes
    ----------
    product_um, left_um
        Product formed and substrate left [umol/L], each to full relative accuracy.
    rate_um_per_s
        Rate at that time [umol/L/s].
    extent
        u = ln(S0/S), natural logarithm of the substrate at the start over what is left [1].
    """

    product_um: Floats
    left_um: Floats
    rate_um_per_s: Floats
    extent: Floats


@dataclass(frozen=True)
class Slopes:
    """Derivatives of the product [umol/L] by each constant, in that constant's unit; arrays alike.

    Attributes
    ----------
    vmax, km, kp, loss, substrate
        By limiting rate, Michaelis constant, product inhibition constant, first-order loss of activity, and
        substrate at the start.
    """

    vmax: Floats
    km: Floats
    kp: Floats
    loss: Floats
    substrate: Floats


def product_formed(
    substrate_um: Floats | float,
    vmax_um_per_s: Floats | float,
    km_um: Floats | float,
    time_s: Floats | float,
    kp_um: Floats | float = np.inf,
    loss_per_s: Floats | float = 0.0,
) -> Floats:
    """Product formed [umol/L]; see `progress`."""
    return progress(substrate_um, vmax_um_per_s, km_um, time_s, kp_um, loss_per_s).product_um


def progress(
    substrate_um: Floats | float,
    vmax_um_per_s: Floats | float,
    km_um: Floats | float,
    time_s: Floats | float,
    kp_um: Floats | float = np.inf,
    loss_per_s: Floats | float = 0.0,
) -> Progress:
    """Course of a reaction by the integrated rate law.

    v = Vmax S / (Km (1 + P/Kp) + S) with P = S0 - S gives, with u = ln(S0/S), A = Km (1 + S0/Kp) and
    c = S0 (1 - Km/Kp) / A,

        u + c (1 - exp(-u)) = Vmax t' / A,    t' = (1 - exp(-kd t)) / kd,

    that is S = S0 W(c exp(c - Vmax t'/A)) / c with the Lambert function W. Taken as the Wright omega function
    of the logarithm of its argument it does not overflow, and gives a start for u; u is then polished in a
    form that cancels nowhere, so that P = S0 (1 - exp(-u)) and S = S0 exp(-u) both keep their digits. Without
    loss of activity both are good to 1e-12 of themselves for S0/Km from 1e-6 to 1e6 at any conversion; with
    it, S inherits the rounding of t', up to S0/Km times the machine's precision.

    Parameters
    ----------
    substrate_um
        Substrate at the start, no product there [umol/L]; 0 or more. All arguments may be arrays that
        broadcast.
    vmax_um_per_s
        Limiting rate at the start [umol/L/s]; 0 or more. The classic slip is a rate per minute with a time in
        seconds.
    km_um
        Michaelis constant [umol/L], above 0.
    time_s
        Time since the reaction began [s]; 0 or more.
    kp_um
        Competitive inhibition constant of the product [umol/L]; infinite for none.
    loss_per_s
        First-order loss of the enzyme's activity [1/s].

    Returns
    -------
    Progress

    References
    ----------
    Schnell and Mendoza (1997), J. Theor. Biol. 187, 207-212, doi:10.1006/jtbi.1997.0425, eq. 9, extended by
    the product term, which is integrated in the same way. Corless, Gonnet, Hare, Jeffrey and Knuth (1996),
    Adv. Comput. Math. 5, 329-359, doi:10.1007/BF02124750, for W.
    """
    s0, vmax, km, time, kp, loss = _alike(substrate_um, vmax_um_per_s, km_um, time_s, kp_um, loss_per_s)
    extent = _extent(s0, vmax, km, effective_time(time, loss), kp)
    remaining = np.exp(-extent)
    left, product = s0 * remaining, -s0 * np.expm1(-extent)
    rate = vmax * np.exp(-loss * time) * left / _denominator(km, kp, product, left)
    return Progress(product, left, rate, extent)


def effective_time(time_s: Floats | float, loss_per_s: Floats | float) -> Floats:
    """Time that an enzyme with undiminished activity would need: (1 - exp(-kd t)) / kd [s].

    Parameters
    ----------
    time_s
        Time since the reaction began [s].
    loss_per_s
        First-order loss of activity [1/s]; at 0 the time itself.
    """
    return np.asarray(time_s * exprel(-np.asarray(loss_per_s) * time_s), dtype=np.float64)


def slopes(
    at: Progress,
    substrate_um: Floats | float,
    vmax_um_per_s: Floats | float,
    km_um: Floats | float,
    time_s: Floats | float,
    kp_um: Floats | float = np.inf,
    loss_per_s: Floats | float = 0.0,
) -> Slopes:
    """Analytic derivatives of the product by each constant, from the implicit equation of `progress`.

    Parameters
    ----------
    at
        The course for the same arguments.
    substrate_um, vmax_um_per_s, km_um, time_s, kp_um, loss_per_s
        As in `progress`.

    Returns
    -------
    Slopes
        By an infinite kp the derivative is 0.
    """
    s0, vmax, km, time, kp, loss = _alike(substrate_um, vmax_um_per_s, km_um, time_s, kp_um, loss_per_s)
    u, over_kp = at.extent, s0 / kp
    denominator = _denominator(km, kp, at.product_um, at.left_um)
    share = at.left_um / denominator
    # The bracketed terms are 0 without product inhibition, and then not worth their cost.
    inhibited = bool(np.any(over_kp > 0))
    curved = over_kp * _beyond_line(u) if inhibited else 0.0
    bent = over_kp * _second_gamma(u) if inhibited else 0.0
    return Slopes(
        vmax=share * effective_time(time, loss),
        km=-share * (u + curved),
        kp=share * (km / kp) * curved,
        # -t^2 (1 - (1 + x) exp(-x)) / x^2 with x = kd t is the derivative of the effective time by kd.
        loss=-share * vmax * time * time * _second_loss(loss * time),
        substrate=km * (-np.expm1(-u) + bent) / denominator,
    )


def _alike(*values: Floats | float) -> tuple[Floats, ...]:
    # Copies in memory order: strided views may take another code path and another last bit.
    return tuple(np.array(each, dtype=np.float64) for each in np.broadcast_arrays(*map(np.asarray, values)))


def _denominator(km: Floats, kp: Floats, product: Floats, left: Floats) -> Floats:
    return km * (1.0 + product / kp) + left


def _extent(s0: Floats, vmax: Floats, km: Floats, time: Floats, kp: Floats) -> Floats:
    """u = ln(S0/S), to relative rounding while small and to absolute rounding once large."""
    with np.errstate(all="ignore"):
        scale = km * (1.0 + s0 / kp)
        # 1 + c, without the cancellation that a strong product inhibition would bring.
        q = (km + s0) / scale
        c = s0 * (1.0 - km / kp) / scale
        turned, rest = _exact_product(vmax, time)
        y = turned / scale
        beyond = (((turned - s0) + rest) + km * (s0 / kp)) / scale
        u = np.atleast_1d(_start(c, q, y))
        cancels = np.nonzero(np.atleast_1d(q < 1.0))
        for _ in range(_POLISHES):
            falling = np.exp(-u)
            consumed = -np.expm1(-u)
            bent = u - consumed
            if cancels[0].size:
                bent[cancels] = _beyond_line(u[cancels])
            plain = q * consumed + bent - y
            excess = np.where(u < _SERIES_BELOW, plain, u - c * falling - beyond)
            slope = np.where(u < _SERIES_BELOW, q * falling + consumed, 1.0 + c * falling)
            step = excess / slope
            u = np.maximum(u - step / (1.0 + 0.5 * step * c * falling / slope), 0.0)
    return u.reshape(s0.shape)


def _start(c: Floats, q: Floats, y: Floats) -> Floats:
    """A first u: the Wright omega function for c above 0, else a parabola and one turn of
    u = y - c + c exp(-u)."""
    omega = wrightomega(np.log(np.maximum(c, 1e-300)) + c - y)
    positive = np.maximum(y - c + omega, y / q)
    parabola = 2.0 * y / (q + np.sqrt(q * q + 2.0 * np.maximum(-c, 0.0) * y))
    negative = np.maximum(parabola, y + c * np.expm1(-parabola))
    start: Floats = np.where(c > 0, positive, negative)
    return start


def _exact_product(a: Floats, b: Floats) -> tuple[Floats, Floats]:
    """Product and its rounding error (Dekker 1971, doi:10.1007/BF01397083)."""
    product = a * b
    a_high = _SPLITTER * a - (_SPLITTER * a - a)
    b_high = _SPLITTER * b - (_SPLITTER * b - b)
    a_low, b_low = a - a_high, b - b_high
    rest = ((a_high * b_high - product) + a_high * b_low + a_low * b_high) + a_low * b_low
    return product, np.where(np.isfinite(rest), rest, 0.0)


def _beyond_line(u: Floats) -> Floats:
    """u - 1 + exp(-u), without cancellation; the series has positive terms only."""
    small = np.minimum(u, _SERIES_BELOW)
    total = np.ones_like(small)
    for n in range(_SERIES_TERMS, 1, -1):
        total = total * small * (n / ((n - 1.0) * (n + 1.0))) + 1.0
    series = np.exp(-small) * small * small * 0.5 * total
    direct: Floats = np.where(u < _SERIES_BELOW, series, u + np.expm1(-u))
    return direct


def _second_gamma(u: Floats) -> Floats:
    """1 - (1 + u) exp(-u), without cancellation."""
    small = np.minimum(u, _SERIES_BELOW)
    total = np.ones_like(small)
    for n in range(_SERIES_TERMS, 2, -1):
        total = total * small / n + 1.0
    series = np.exp(-small) * small * small * 0.5 * total
    direct: Floats = np.where(u < _SERIES_BELOW, series, -np.expm1(-u) - u * np.exp(-u))
    return direct


def _second_loss(x: Floats) -> Floats:
    """(1 - (1 + x) exp(-x)) / x^2, 1/2 at 0."""
    if not np.any(x > 0):
        return np.full_like(x, 0.5)
    with np.errstate(all="ignore"):
        return np.where(x > 1e-150, _second_gamma(x) / (x * x), 0.5)
