"""Laws of one's own: derivatives given or by complex step, limits, amplitude or none, bad definitions."""

from __future__ import annotations

import numpy as np
import pytest

from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import MICHAELIS_MENTEN, Conditions, at_levels
from models.kinetics.own_laws import own_law

LEVELS = np.repeat(np.geomspace(10.0, 960.0, 8), 3)[:, None]
RATES = (
    0.05 * LEVELS / (80.0 + LEVELS) * (1.0 + 0.02 * np.random.default_rng(2).standard_normal(LEVELS.shape))
)


def hyperbola(s: np.ndarray, vmax: np.ndarray, km: np.ndarray) -> np.ndarray:
    return vmax * s / (km + s)


@pytest.mark.parametrize("amplitude", ["vmax", None])
@pytest.mark.parametrize("given", [True, False])
def test_a_hyperbola_of_ones_own_is_the_rate_law(amplitude: str | None, given: bool) -> None:
    derivatives = [lambda s, v, k: s / (k + s), lambda s, v, k: -v * s / (k + s) ** 2]
    own = own_law(
        "hyperbola",
        hyperbola,
        {"vmax": 0.1, "km": 200.0},
        amplitude=amplitude,
        derivatives=derivatives if given else None,
    )
    conditions, weights = at_levels(LEVELS), np.ones_like(RATES)
    mine, theirs = fit_law(own, conditions, RATES), fit_law(MICHAELIS_MENTEN, conditions, RATES)
    np.testing.assert_allclose(mine.constants, theirs.constants, rtol=1e-7)
    np.testing.assert_allclose(mine.covariance, theirs.covariance, rtol=1e-6)
    for ends, expected in zip(
        profile_intervals(mine, conditions, RATES, weights),
        profile_intervals(theirs, conditions, RATES, weights),
        strict=True,
    ):
        np.testing.assert_allclose(ends, expected, rtol=1e-6)


def test_further_variables_and_limits_reach_the_equation() -> None:
    x, z = np.meshgrid(np.arange(1.0, 6.0), np.arange(1.0, 5.0))
    x, z = x.reshape(-1, 1), z.reshape(-1, 1)
    y = 2.0 * x - 3.0 * z + 0.5
    own = own_law("plane", lambda x, z, a, b, c: a * x + b * z + c, {"a": 1.0, "b": -1.0, "c": 0.1})
    conditions = Conditions(x, np.log(x), further=(z,))
    np.testing.assert_allclose(fit_law(own, conditions, y).constants[:, 0], [2.0, -3.0, 0.5], rtol=1e-8)
    tied = own_law(
        "plane", lambda x, z, a, b: a * x + b * z, {"a": 1.0, "b": -1.0}, limits={"b": (-2.0, 2.0)}
    )
    fit = fit_law(tied, conditions, y)
    assert fit.at_limit[0]
    assert fit.constants[1, 0] == -2.0


def test_a_law_that_cannot_be_is_refused() -> None:
    with pytest.raises(ValueError, match="not among the constants"):
        own_law("x", hyperbola, {"vmax": 1.0, "km": 1.0}, amplitude="top")
    with pytest.raises(ValueError, match="as many derivatives"):
        own_law("x", hyperbola, {"vmax": 1.0, "km": 1.0}, derivatives=[hyperbola])
    with pytest.raises(ValueError, match="beside its amplitude"):
        own_law("x", lambda s, a: a * s, {"a": 1.0}, amplitude="a")
