"""The concerted model of Monod, Wyman and Changeux for enzymes whose subunits change together.

The number of subunits is known and part of the law's name. Exclusive: substrate binds to the R state alone.
"""

from __future__ import annotations

import numpy as np

from models.kinetics.laws.law import (
    VMAX,
    Array,
    Conditions,
    Constant,
    Evaluate,
    Floats,
    RateLaw,
    geometric_grid,
    level_range,
    start_grid,
)

K_R = Constant("k_r", "umol/L", "Dissociation constant of substrate from the R state", 1e-3, 1e3, True)
ALLOSTERIC = Constant("allosteric_l", "1", "T state over R state without substrate", 1e-3, 1e9, False)
C_RATIO = Constant(
    "c_ratio", "1", "Dissociation constant of the R state over that of the T state", 1e-6, 1.0, False
)
_SOURCE = "Monod, Wyman and Changeux 1965, doi:10.1016/S0022-2836(65)80285-6"


def evaluate_with(subunits: int) -> Evaluate:
    """Equation for a number of subunits.

    With a = S / Kr, q = L ((1 + c a) / (1 + a))^n, r = 1 / (1 + q): f = r a / (1 + a) + (1 - r) c a / (1 + c
    a), both states turning over alike.
    """

    def evaluate(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
        k_r, allosteric = constants[:2]
        alpha = conditions.substrate_um / k_r
        in_r = alpha / (1.0 + alpha)
        log_q = np.log(allosteric) - subunits * np.log1p(alpha)
        if len(constants) == 2:
            r, t = 1.0 / (1.0 + np.exp(log_q)), 1.0 / (1.0 + np.exp(-log_q))
            shape = in_r * r
            by_alpha = shape * (1.0 - in_r + subunits * in_r * t)
            return shape, (-by_alpha, -shape * t)
        c_alpha = constants[2] * alpha
        in_t = c_alpha / (1.0 + c_alpha)
        log_q = log_q + subunits * np.log1p(c_alpha)
        r, t = 1.0 / (1.0 + np.exp(log_q)), 1.0 / (1.0 + np.exp(-log_q))
        difference, both = in_r - in_t, r * t
        by_alpha = (
            in_r * (1.0 - in_r) * r + in_t * (1.0 - in_t) * t + subunits * both * difference * difference
        )
        by_c = in_t * (1.0 - in_t) * t - subunits * both * difference * in_t
        return in_r * r + in_t * t, (-by_alpha, -difference * both, by_c)

    return evaluate


def _grids(conditions: Conditions, weights: Floats) -> tuple[Floats, Floats]:
    low, high = level_range(conditions, weights)
    ratios = np.array([[0.1], [3.0], [30.0], [1e3], [1e5]])
    return geometric_grid(low / 4.0, high, 6), np.repeat(ratios, low.size, axis=1)


def exclusive_starts(conditions: Conditions, weights: Floats) -> Floats:
    """Six Kr over the levels, each with five L from 0.1 to 1e5."""
    return start_grid(*_grids(conditions, weights))


def general_starts(conditions: Conditions, weights: Floats) -> Floats:
    """The same, each with c of 0.001, 0.03 and 0.3."""
    k_r, ratios = _grids(conditions, weights)
    c = np.repeat(np.array([[1e-3], [0.03], [0.3]]), k_r.shape[1], axis=1)
    return start_grid(k_r, ratios, c)


def _exclusive(name: str, title: str, subunits: int, rank: int) -> RateLaw:
    power = "" if subunits == 2 else f"^{subunits - 1}"
    return RateLaw(
        name=name,
        title=title,
        equation=f"v = vmax a (1 + a){power} / (allosteric_l + (1 + a)^{subunits}), a = S / k_r",
        amplitude=VMAX,
        shape_constants=(K_R, ALLOSTERIC),
        evaluate=evaluate_with(subunits),
        starts=exclusive_starts,
        half_saturation=None,
        source=_SOURCE,
        rank=rank,
        fewest_levels=4,
    )


CONCERTED_DIMER = _exclusive("concerted_dimer", "Concerted, two subunits", 2, 4)
CONCERTED_TETRAMER = _exclusive("concerted_tetramer", "Concerted, four subunits", 4, 5)
CONCERTED_TETRAMER_GENERAL = RateLaw(
    name="concerted_tetramer_general",
    title="Concerted, four subunits, both states bind",
    equation=(
        "v = vmax (a (1 + a)^3 + allosteric_l c_ratio a (1 + c_ratio a)^3) "
        "/ ((1 + a)^4 + allosteric_l (1 + c_ratio a)^4), a = S / k_r"
    ),
    amplitude=VMAX,
    shape_constants=(K_R, ALLOSTERIC, C_RATIO),
    evaluate=evaluate_with(4),
    starts=general_starts,
    half_saturation=None,
    source=_SOURCE,
    rank=6,
    fewest_levels=5,
)
