"""Standard curves: invariants of every shape, coverage of the errors, and refusals with their reasons."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from models.calibration.calibration import Calibration
from models.calibration.choices import WEIGHTINGS, Model
from models.calibration.curves import CURVES, CurveShape, curve_shape
from models.calibration.standard_curve import CalibrationRefusal, calibrate
from models.errors import UnknownName

Floats = NDArray[np.float64]

LEVELS = np.array([0.0, 2.0, 5.0, 10.0, 20.0, 50.0, 100.0])
STANDARDS = np.repeat(LEVELS, 3)
TRUTH = {
    "linear": np.array([0.05, 0.011]),
    "quadratic": np.array([0.05, 0.011, -2e-5]),
    "four_parameter": np.array([0.05, 2.5, 40.0, 1.2]),
}
SHAPES = list(CURVES.values())


def usable(found: Calibration | CalibrationRefusal) -> Calibration:
    assert isinstance(found, Calibration), found
    return found


def read(shape: CurveShape, generator: np.random.Generator, sd: float = 0.005) -> Floats:
    signal = shape.signal(STANDARDS, TRUTH[shape.name])
    return np.asarray(signal + sd * generator.standard_normal(signal.size))


def named(shape: CurveShape) -> str:
    return shape.name


def test_the_choices_are_the_registry() -> None:
    assert set(Model.__args__) == set(CURVES)
    with pytest.raises(UnknownName, match="linear"):
        curve_shape("cubic")
    with pytest.raises(UnknownName, match="proportional"):
        calibrate(STANDARDS, STANDARDS, weighting="equal")  # type: ignore[arg-type]


@pytest.mark.parametrize("shape", SHAPES, ids=named)
def test_derivatives_are_those_of_the_signal(shape: CurveShape) -> None:
    truth, product = TRUTH[shape.name], np.geomspace(0.1, 90.0, 30)
    step = 1e-6
    numeric = (shape.signal(product * (1 + step), truth) - shape.signal(product * (1 - step), truth)) / (
        2 * step * product
    )
    np.testing.assert_allclose(shape.slope(product, truth), numeric, rtol=1e-6)
    gradient = shape.gradient(product, truth)
    for index in range(truth.size):
        up, down = truth.copy(), truth.copy()
        up[index] *= 1 + 1e-4
        down[index] *= 1 - 1e-4
        numeric = (shape.signal(product, up) - shape.signal(product, down)) / (up[index] - down[index])
        np.testing.assert_allclose(gradient[index], numeric, rtol=1e-6, atol=1e-7)


@pytest.mark.parametrize("shape", SHAPES, ids=named)
def test_the_inverse_is_the_inverse(shape: CurveShape) -> None:
    product = np.concatenate([[0.0], np.geomspace(1e-3, 99.0, 40)])
    back = shape.inverse(shape.signal(product, TRUTH[shape.name]), TRUTH[shape.name], 1.0)
    np.testing.assert_allclose(back, product, rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize("shape", SHAPES, ids=named)
def test_slope_at_product_zero_is_its_limit(shape: CurveShape) -> None:
    near, at = shape.slope(np.array([1e-9, 0.0]), TRUTH[shape.name])
    assert at == pytest.approx(near, abs=2e-3)


def test_slope_of_a_hyperbola_at_zero() -> None:
    slope = CURVES["four_parameter"].slope(np.array([0.0]), np.array([0.1, 2.1, 40.0, 1.0]))
    assert slope[0] == pytest.approx(2.0 / 40.0)


@given(
    intercept=st.floats(-1.0, 1.0),
    slope=st.floats(0.001, 1.0),
    bend=st.floats(-0.4, 0.4),
    falls=st.booleans(),
)
@settings(max_examples=50, deadline=None)
def test_a_parabola_is_found_and_inverted_on_its_own_branch(
    intercept: float, slope: float, bend: float, falls: bool
) -> None:
    sign = -1.0 if falls else 1.0
    truth = sign * np.array([intercept, slope, bend * slope / LEVELS[-1]])
    curve = usable(calibrate(LEVELS, CURVES["quadratic"].signal(LEVELS, truth), "quadratic"))
    product, local_slope = curve.to_product(curve.signal(LEVELS))
    np.testing.assert_allclose(product, LEVELS, rtol=1e-6, atol=1e-6)
    assert (np.sign(local_slope) == sign).all()
    assert curve.direction == ("falls" if falls else "rises")


@pytest.mark.parametrize("weighting", WEIGHTINGS)
@pytest.mark.parametrize("shape", SHAPES, ids=named)
def test_order_of_standards_does_not_matter_to_the_last_bit(shape: CurveShape, weighting: str) -> None:
    generator = np.random.default_rng(1)
    signal, order = read(shape, generator), generator.permutation(STANDARDS.size)
    plain = usable(calibrate(STANDARDS, signal, shape.name, weighting))  # type: ignore[arg-type]
    shuffled = usable(calibrate(STANDARDS[order], signal[order], shape.name, weighting))  # type: ignore[arg-type]
    np.testing.assert_array_equal(plain.parameters, shuffled.parameters)
    np.testing.assert_array_equal(plain.covariance, shuffled.covariance)


@pytest.mark.parametrize("shape", SHAPES, ids=named)
def test_errors_of_parameters_product_and_difference_cover(shape: CurveShape) -> None:
    """95 % of two-sided t intervals hold the truth; the shared error is that of a difference of product."""
    generator, runs, product = np.random.default_rng(2), 250, np.array([8.0, 60.0])
    true = shape.signal(product, TRUTH[shape.name])
    # t with 21 standards less the parameters, from memory 2.09 to 2.11.
    reach, in_parameters, in_product, difference, claimed = 2.1, [], [], [], []
    for _ in range(runs):
        curve = usable(calibrate(STANDARDS, read(shape, generator), shape.name))
        in_parameters.append(np.abs(curve.parameters - TRUTH[shape.name]) <= reach * curve.standard_errors)
        signal = true + 0.005 * generator.standard_normal(2)
        found, error = curve.to_product(signal)[0], curve.product_error(signal).total
        in_product.append(np.abs(found - product) <= reach * error)
        ends = curve.to_product(true)[0]
        difference.append((ends[1] - ends[0]) / (product[1] - product[0]) - 1.0)
        claimed.append(curve.relative_error_between(*product))
    for share in (*np.mean(in_parameters, axis=0), *np.mean(in_product, axis=0)):
        assert 0.91 < share < 0.985
    assert np.sqrt(np.mean(np.square(claimed))) == pytest.approx(np.std(difference), rel=0.12)


def test_weights_follow_the_scatter() -> None:
    """Scatter in proportion: weighted, the intercept is several times better known, and known to be."""
    generator, truth = np.random.default_rng(3), TRUTH["linear"]
    found: dict[str, list[float]] = {name: [] for name in WEIGHTINGS}
    claimed: dict[str, list[float]] = {name: [] for name in WEIGHTINGS}
    for _ in range(100):
        signal = CURVES["linear"].signal(STANDARDS, truth)
        signal = signal * (1.0 + 0.05 * generator.standard_normal(signal.size))
        for name in WEIGHTINGS:
            curve = usable(calibrate(STANDARDS, signal, "linear", name))  # type: ignore[arg-type]
            found[name].append(curve.parameters[0])
            claimed[name].append(curve.standard_errors[0])
    assert np.std(found["proportional"]) < 0.4 * np.std(found["constant"])
    assert np.std(found["replicates"]) < 0.6 * np.std(found["constant"])
    assert np.mean(claimed["proportional"]) == pytest.approx(np.std(found["proportional"]), rel=0.15)
    # From few replicates the weights are drawn towards equal parts, and the error claimed is a cautious one.
    assert 0.95 < np.mean(claimed["replicates"]) / np.std(found["replicates"]) < 1.6


def test_residual_sd_of_a_proportional_curve_is_its_cv() -> None:
    signal = CURVES["linear"].signal(np.repeat(LEVELS, 100), TRUTH["linear"])
    signal = signal * (1.0 + 0.05 * np.random.default_rng(4).standard_normal(signal.size))
    curve = usable(calibrate(np.repeat(LEVELS, 100), signal, "linear", "proportional"))
    assert curve.residual_sd == pytest.approx(0.05, rel=0.1)
    assert curve.reading_sd(np.array([1.0]))[0] == pytest.approx(0.05, rel=0.1)


def test_outside_the_range_there_is_no_product() -> None:
    curve = usable(calibrate(LEVELS, CURVES["linear"].signal(LEVELS, TRUTH["linear"]), extrapolation=0.1))
    signal = curve.signal(np.array([-10.1, -9.9, 50.0, 109.9, 110.1, np.nan]))
    inside = [False, True, True, True, False, False]
    assert curve.in_range(signal).tolist() == inside
    assert np.isfinite(curve.to_product(signal)[0]).tolist() == inside
    assert np.isfinite(curve.product_error(signal).total).tolist() == inside
    assert curve.signal_range == pytest.approx((0.05 - 0.11, 0.05 + 1.21))


def test_extrapolation_stops_where_a_parabola_turns() -> None:
    truth = np.array([0.0, 0.02, -0.02 / 208.0])  # turns at 104
    curve = usable(
        calibrate(LEVELS, CURVES["quadratic"].signal(LEVELS, truth), "quadratic", extrapolation=0.2)
    )
    assert curve.highest_um == pytest.approx(104.0)


def test_a_logistic_says_nothing_beyond_its_ends() -> None:
    signal = read(CURVES["four_parameter"], np.random.default_rng(5))
    curve = usable(calibrate(STANDARDS, signal, "four_parameter"))
    bottom, top = curve.parameters[:2]
    assert np.isnan(curve.to_product(np.array([bottom - 0.01, top + 0.01]))[0]).all()
    assert np.isfinite(curve.relative_error_shared)


def test_one_signal_may_come_without_an_array() -> None:
    for shape in SHAPES:
        curve = usable(calibrate(STANDARDS, read(shape, np.random.default_rng(6)), shape.name))
        product, slope = curve.to_product(np.array(0.5))
        assert product.shape == slope.shape == ()
        assert np.isfinite(product)


def test_back_calculated_errors_are_percent_of_nominal() -> None:
    curve = usable(calibrate(LEVELS, CURVES["linear"].signal(LEVELS, TRUTH["linear"])))
    np.testing.assert_allclose(curve.back_error_percent()[1:], 0.0, atol=1e-9)
    assert np.isnan(curve.back_error_percent()[0])
    signal = CURVES["linear"].signal(STANDARDS, TRUTH["linear"])
    signal[-1] *= 1.2
    curve = usable(calibrate(STANDARDS, signal))
    expected = 100.0 * (curve.back_calculated_um()[-1] / 100.0 - 1.0)
    assert curve.back_error_percent()[-1] == pytest.approx(expected)
    assert expected > 10.0


def test_a_line_through_a_bent_curve_shows_as_lack_of_fit() -> None:
    signal = CURVES["quadratic"].signal(STANDARDS, TRUTH["quadratic"])
    signal = signal + 0.005 * np.random.default_rng(7).standard_normal(signal.size)
    assert usable(calibrate(STANDARDS, signal, "linear")).misfit.p_value[0] < 1e-6
    assert usable(calibrate(STANDARDS, signal, "quadratic")).misfit.p_value[0] > 0.01


RISING = 0.05 + 0.011 * STANDARDS
TURNING = STANDARDS * (80.0 - STANDARDS)
STEP = np.where(STANDARDS < 15.0, 0.1, 2.0)


@pytest.mark.parametrize(
    ("product", "signal", "chosen", "kind", "words"),
    [
        (LEVELS[:2], LEVELS[:2], {}, "too_few_levels", "2 distinct standards; Straight line needs 3"),
        (np.ones(9), np.arange(9.0), {}, "too_few_levels", "1 distinct standard; "),
        (np.array([]), np.array([]), {}, "too_few_levels", "0 distinct standards"),
        (LEVELS[:4], LEVELS[:4], {"model": "four_parameter"}, "too_few_levels", "needs 5"),
        (LEVELS, np.where(LEVELS == 5.0, np.nan, LEVELS), {}, "unknown_value", "no known signal"),
        (LEVELS - 1.0, LEVELS, {}, "unknown_value", "0 or more"),
        (STANDARDS, np.full(21, 0.4), {}, "flat", "does not depend"),
        (STANDARDS, np.random.default_rng(8).normal(0.4, 0.1, 21), {}, "flat", "does not depend"),
        (STANDARDS, RISING, {"direction": "falls"}, "wrong_direction", "rises with product; the assay says"),
        (STANDARDS, -RISING, {"direction": "rises"}, "wrong_direction", "falls with product"),
        (
            STANDARDS,
            STANDARDS * (80 - STANDARDS),
            {"model": "quadratic"},
            "not_monotonic",
            "turns at 40 umol/L",
        ),
        (LEVELS, LEVELS, {"weighting": "replicates"}, "no_replicates", "no standard has replicates"),
        (STANDARDS, RISING, {"weighting": "replicates"}, "no_replicates", "no standard has replicates"),
        (STANDARDS, STEP, {"model": "four_parameter"}, "not_determined", "do not determine"),
    ],
)
def test_refusals(product: Floats, signal: Floats, chosen: dict[str, str], kind: str, words: str) -> None:
    found = calibrate(product, signal, **chosen)  # type: ignore[arg-type]
    assert isinstance(found, CalibrationRefusal)
    assert found.kind == kind
    assert words in found.reason
