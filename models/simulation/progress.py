"""Progress curves in closed form: product against time under a rate law, nothing linearised.

Knows laws and time only: no wells, noise or signals. A rate that changes with time (lag, burst, loss of
activity) enters as effective time, the integral of the relative activity.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import exprel

from models.kinetics.progress.integrated import effective_time as remaining_time
from models.kinetics.progress.integrated import product_formed

Array = NDArray[np.float64]

# Substrate fractions below exp(-600 / (n - 1)) are zero for any reader and would overflow S**(1 - n).
_DEEPEST_LOG_FRACTION = 600.0
_STEPS_TO_MACHINE_PRECISION = 200


def michaelis_menten_product(substrate_um: Array, vmax_um_per_s: Array, km_um: Array, time_s: Array) -> Array:
    """Product formed by the integrated Michaelis-Menten law.

    The law itself is defined in `models.kinetics.progress.integrated`; here it stands without product
    inhibition, beside the Hill law.

    Parameters
    ----------
    substrate_um, vmax_um_per_s, km_um
        Substrate at the start [umol/L], limiting rate [umol/L/s], Michaelis constant [umol/L]; any shapes
        that broadcast with `time_s`.
    time_s
        Time, or effective time where the activity changes [s].

    Returns
    -------
    Array
        Product [umol/L], of the broadcast shape.

    References
    ----------
    Schnell and Mendoza (1997), J. Theor. Biol. 187, 207-212, doi:10.1006/jtbi.1997.0425, eq. 9.
    """
    return product_formed(substrate_um, vmax_um_per_s, km_um, time_s)


def hill_product(
    substrate_um: Array, vmax_um_per_s: Array, k_half_um: Array, hill_n: Array, time_s: Array
) -> Array:
    """Product formed by the integrated Hill law v = Vmax S**n / (K**n + S**n).

    With u = ln(S/S0) and x = S0/K, integration gives
    Vmax t / S0 = 1 - exp(u) - x**(-n) u (exp((1 - n) u) - 1) / ((1 - n) u), which falls with u and is solved
    for u by Newton steps kept inside a bracket. At n = 1 it is the Michaelis-Menten law.

    Parameters
    ----------
    substrate_um, vmax_um_per_s, k_half_um
        Substrate at the start [umol/L], limiting rate [umol/L/s], substrate at half the limiting rate
        [umol/L]; any shapes that broadcast with `time_s`.
    hill_n
        Hill coefficient [1].
    time_s
        Time, or effective time where the activity changes [s].

    Returns
    -------
    Array
        Product [umol/L], of the broadcast shape.

    References
    ----------
    Hill (1910), J. Physiol. 40, iv-vii, for the law; the integral is elementary.
    """
    start, vmax, k_half, n, time = np.broadcast_arrays(substrate_um, vmax_um_per_s, k_half_um, hill_n, time_s)
    product = np.zeros(start.shape)
    some = (start > 0) & (time > 0) & (vmax > 0)
    s0, order = start[some], n[some]
    target = vmax[some] * time[some] / s0
    weight = np.exp(-order * np.log(s0 / k_half[some]))

    low = -_DEEPEST_LOG_FRACTION / np.maximum(1.0, np.abs(order - 1.0))
    high = np.zeros_like(s0)
    u = np.maximum(-target / (1.0 + weight), low)
    for _ in range(_STEPS_TO_MACHINE_PRECISION):
        excess = -np.expm1(u) - weight * u * exprel((1.0 - order) * u) - target
        low, high = np.where(excess > 0, u, low), np.where(excess > 0, high, u)
        stepped = u + excess / (np.exp(u) + weight * np.exp((1.0 - order) * u))
        inside = (stepped >= low) & (stepped <= high)
        moved = np.where(inside, stepped, 0.5 * (low + high))
        done = bool(np.all(np.abs(moved - u) <= 4e-16 * np.abs(u)))
        u = moved
        if done:
            break
    product[some] = -s0 * np.expm1(u)
    return product


def effective_time(time_s: Array, transient_ratio: Array, transient_per_s: Array, loss_per_s: Array) -> Array:
    """Integral of the relative activity from 0 to t.

    The activity is exp(-loss t) (1 + (ratio - 1) exp(-k t)): a burst where the ratio of the first to the
    later rate is above 1, a lag where it is below, an enzyme that dies where the loss is not 0. At constant
    substrate the product is then vs t + (vi - vs)(1 - exp(-k t))/k, the slow-binding form.

    Parameters
    ----------
    time_s
        Time since the reaction began [s].
    transient_ratio
        First rate over the rate after the transient [1]; 1 for no transient.
    transient_per_s
        Rate constant of the transient [1/s].
    loss_per_s
        First-order loss of activity [1/s].

    Returns
    -------
    Array
        Effective time [s], of the broadcast shape.

    References
    ----------
    Morrison and Walsh (1988), Adv. Enzymol. 61, 201-301, doi:10.1002/9780470123072.ch5.
    """

    transient = remaining_time(time_s, loss_per_s + transient_per_s)
    steady: Array = remaining_time(time_s, loss_per_s) + (transient_ratio - 1.0) * transient
    return steady
