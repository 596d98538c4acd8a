"""Progress curves against numerical integration, quadrature and the closed form's own limits."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad, solve_ivp

from models.simulation.progress import effective_time, hill_product, michaelis_menten_product

positive = st.floats(1e-3, 1e5)


def integrated(rate, start, times):
    answer = solve_ivp(
        lambda t, s: [-rate(t, max(s[0], 0.0))],
        (0, times[-1]),
        [start],
        "DOP853",
        times,
        rtol=1e-12,
        atol=1e-12,
    )
    return start - answer.y[0]


@pytest.mark.parametrize(
    ("start", "after_half_minute", "after_one_minute"),
    [(100.0, 3.31460733789, 6.59091904889)],
)
def test_michaelis_menten_gives_the_closed_form_values(start, after_half_minute, after_one_minute):
    # Computed from S(t) = Km W(S0/Km exp((S0 - V t)/Km)), Schnell and Mendoza (1997),
    # doi:10.1006/jtbi.1997.0425, with Vmax 10 umol/L/min and Km 50 umol/L.
    product = michaelis_menten_product(start, 10.0 / 60.0, 50.0, np.array([30.0, 60.0]))
    np.testing.assert_allclose(product, [after_half_minute, after_one_minute], rtol=1e-11)


@pytest.mark.parametrize("start", [0.5, 50.0, 4000.0])
def test_michaelis_menten_agrees_with_numerical_integration(start):
    times = np.linspace(1, 2.5 * start / 0.2 + 900, 12)
    expected = integrated(lambda _, s: 0.2 * s / (35.0 + s), start, times)
    np.testing.assert_allclose(
        michaelis_menten_product(start, 0.2, 35.0, times), expected, rtol=1e-8, atol=1e-9
    )


@pytest.mark.parametrize("hill_n", [0.7, 1.0, 1.5, 2.0, 3.9])
@pytest.mark.parametrize("start", [5.0, 60.0, 900.0])
def test_hill_agrees_with_numerical_integration(start, hill_n):
    def rate(s):
        return 0.3 * s**hill_n / (60.0**hill_n + s**hill_n)

    times = np.linspace(1, 0.8 * start / rate(start), 12)
    expected = integrated(lambda _, s: rate(s), start, times)
    np.testing.assert_allclose(hill_product(start, 0.3, 60.0, hill_n, times), expected, rtol=1e-8, atol=1e-9)


@given(start=positive, vmax=st.floats(1e-5, 10), k=positive, time=st.floats(1e-2, 1e5))
def test_hill_at_one_is_michaelis_menten(start, vmax, k, time):
    one, other = (
        hill_product(start, vmax, k, 1.0, np.array([time])),
        michaelis_menten_product(start, vmax, k, np.array([time])),
    )
    # The Lambert form subtracts Km W from S0, so it is good to rounding of S0.
    np.testing.assert_allclose(one, other, rtol=1e-9, atol=1e-13 * (start + k))


@given(start=positive, vmax=st.floats(1e-5, 10), k=positive, hill_n=st.floats(0.5, 6))
def test_product_rises_from_zero_and_never_passes_the_substrate(start, vmax, k, hill_n):
    times = np.array([0.0, 1.0, 1e2, 1e4, 1e9])
    for product in (
        michaelis_menten_product(start, vmax, k, times),
        hill_product(start, vmax, k, hill_n, times),
    ):
        assert np.all(np.isfinite(product))
        assert abs(product[0]) <= 1e-13 * (start + k)
        assert np.all(np.diff(product) >= -1e-13 * (start + k))
        assert product[-1] <= start


def test_far_above_km_nothing_overflows():
    # exp(S0/Km) would be exp(1e6).
    product = michaelis_menten_product(1e6, 2.0, 1.0, np.array([10.0]))
    np.testing.assert_allclose(product, 20.0, rtol=1e-5)


def test_no_substrate_gives_no_product():
    assert michaelis_menten_product(0.0, 1.0, 1.0, np.array([5.0])) == 0.0
    assert hill_product(0.0, 1.0, 1.0, 2.0, np.array([5.0])) == 0.0


@given(ratio=st.floats(0, 5), transient=st.floats(0, 0.1), loss=st.floats(0, 0.01), until=st.floats(1, 2000))
def test_effective_time_is_the_integral_of_the_activity(ratio, transient, loss, until):
    expected, error = quad(
        lambda t: np.exp(-loss * t) * (1 + (ratio - 1) * np.exp(-transient * t)),
        0,
        until,
        limit=200,
        epsrel=1e-11,
    )
    found = effective_time(until, np.array(ratio), np.array(transient), np.array(loss))
    # Two terms of the size of t are subtracted, so the result is good to rounding of t, not of itself.
    np.testing.assert_allclose(found, expected, rtol=1e-8, atol=10 * error + 1e-14 * until)
