"""Laws of one's own: any equation with named constants, fitted by the same engine as the rate laws.

Derivatives may be given; else they are taken by complex step, exact to rounding for equations of ordinary
NumPy functions. This module knows no particular law.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

import numpy as np

from models.kinetics.laws.law import Array, Conditions, Constant, Evaluate, Floats, RateLaw

Equation = Callable[..., Array]
"""Response for variables (each of shape (points, series)), then constants (each of shape (series,))."""

OWN_RANK = 1000
"""Place of laws of one's own among candidates: after those of the registry."""
_STEP = 1e-30


def own_law(
    name: str,
    equation: Equation,
    starts: Mapping[str, float],
    *,
    amplitude: str | None = None,
    units: Mapping[str, str] | None = None,
    limits: Mapping[str, tuple[float, float]] | None = None,
    derivatives: Sequence[Equation] | None = None,
    text: str = "",
    source: str = "",
) -> RateLaw:
    """A law from an equation.

    Parameters
    ----------
    name
        What to call it.
    equation
        Called with the variables (substrate first), then the constants in the order of `starts`.
    starts
        Start value of each constant.
    amplitude
        A constant that multiplies everything, is above zero and is eliminated while fitting.
    units
        Unit of each constant, "1" where none is given.
    limits
        Lowest and highest value of a constant; none where none is given.
    derivatives
        Of the equation by each constant in order, called as the equation is; all or none.
    text, source
        The equation as text, and where it is from.

    Raises
    ------
    ValueError
        If the amplitude is no constant, there is nothing beside it, or derivatives are missing.
    """
    names = list(starts)
    if amplitude is not None and amplitude not in starts:
        raise ValueError(f"the amplitude '{amplitude}' is not among the constants {', '.join(names)}")
    if derivatives is not None and len(derivatives) != len(names):
        raise ValueError(f"{len(names)} constants need as many derivatives, not {len(derivatives)}")
    shape_names = [each for each in names if each != amplitude]
    if not shape_names:
        raise ValueError("a law needs a constant beside its amplitude")

    def constant(each: str) -> Constant:
        low, high = (limits or {}).get(each, (-np.inf, np.inf))
        return Constant(each, (units or {}).get(each, "1"), each, low, high, False, positive=False)

    def own_starts(conditions: Conditions, weights: Floats) -> Floats:
        values = np.array([[starts[each]] for each in shape_names])
        return np.repeat(values, weights.shape[1], axis=1)[None]

    return RateLaw(
        name=name,
        title=name,
        equation=text,
        amplitude=None
        if amplitude is None
        else Constant(amplitude, (units or {}).get(amplitude, "1"), amplitude, 0.0, np.inf, False),
        shape_constants=tuple(constant(each) for each in shape_names),
        evaluate=_evaluate(equation, names, amplitude, derivatives),
        starts=own_starts,
        half_saturation=None,
        source=source,
        rank=OWN_RANK,
        fewest_levels=1,
    )


def _evaluate(
    equation: Equation, names: list[str], amplitude: str | None, derivatives: Sequence[Equation] | None
) -> Evaluate:
    shape_places = [place for place, each in enumerate(names) if each != amplitude]

    def arguments(constants: tuple[Array, ...]) -> list[Array]:
        values = list(constants)
        if amplitude is not None:
            values.insert(names.index(amplitude), np.ones_like(constants[0]))
        return values

    def evaluate(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
        variables = [conditions.substrate_um, *conditions.further]
        values = arguments(constants)
        shape = equation(*variables, *values)
        if derivatives is not None:
            slopes = [derivatives[place](*variables, *values) for place in shape_places]
            return shape, tuple(slope + np.zeros_like(shape) for slope in slopes)
        slopes = []
        for place in shape_places:
            moved = list(values)
            moved[place] = values[place] + 1j * _STEP
            slopes.append(np.imag(equation(*variables, *moved)) / _STEP + np.zeros_like(shape))
        return shape, tuple(slopes)

    return evaluate
