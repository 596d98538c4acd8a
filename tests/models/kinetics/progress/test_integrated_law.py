"""The closed form against 90-digit arithmetic: values, derivatives, limits."""

from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from models.kinetics.progress.integrated import effective_time, product_formed, progress, slopes
from tests.models.kinetics.progress.exact_progress import exact

ratio = st.floats(-6.0, 6.0).map(lambda x: 10.0**x)
conversion = st.one_of(
    st.floats(-12.0, -0.3).map(lambda x: 10.0**x), st.floats(0.3, 12.0).map(lambda x: 1.0 - 10.0**-x)
)


def time_to(share, s0, vmax, km, kp):
    """Time to convert a share of the substrate, from the integrated law."""
    reach = km * (1 + s0 / kp) * -np.log1p(-share) + s0 * (1 - km / kp) * share
    return max(float(reach), 1e-13 * km) / vmax


def off(found, true):
    return abs(float((Decimal(float(found)) - true) / true))


@given(
    s0_over_km=ratio, kp_over_s0=st.one_of(st.just(np.inf), ratio), share=conversion, km=st.floats(0.01, 1e3)
)
def test_product_and_substrate_left_keep_twelve_digits(s0_over_km, kp_over_s0, share, km):
    s0, kp, vmax = km * s0_over_km, km * s0_over_km * kp_over_s0, 0.37
    time = time_to(share, s0, vmax, km, kp)
    inverse_kp = Decimal(0) if np.isinf(kp) else 1 / Decimal(kp)
    product, left = exact(Decimal(s0), Decimal(vmax), Decimal(km), Decimal(time), inverse_kp, Decimal(0))
    at = progress(s0, vmax, km, time, kp)
    assert off(at.product_um, product) < 1e-12
    assert off(at.left_um, left) < 1e-12


@given(s0_over_km=ratio, kp_over_s0=ratio, share=st.floats(1e-6, 0.999), loss_times=st.floats(1e-6, 3.0))
def test_loss_of_activity_keeps_the_digits_that_its_effective_time_has(
    s0_over_km, kp_over_s0, share, loss_times
):
    km, vmax = 40.0, 0.37
    s0, kp = km * s0_over_km, km * s0_over_km * kp_over_s0
    time = time_to(share, s0, vmax, km, kp)
    loss = loss_times / time
    product, left = exact(*map(Decimal, (s0, vmax, km, time)), 1 / Decimal(kp), Decimal(loss))
    at = progress(s0, vmax, km, time, kp, loss)
    assert off(at.product_um, product) < 1e-12
    assert off(at.left_um, left) < 1e-12 + 1e-15 * s0_over_km


@pytest.mark.parametrize("s0_over_km", [1e-6, 1e-3, 0.3, 7.0, 1e3, 1e6])
@pytest.mark.parametrize("kp_over_s0", [1e-4, 0.05, 1.0, 300.0])
@pytest.mark.parametrize("share", [1e-9, 1e-3, 0.4, 0.97])
def test_derivatives_agree_with_high_precision_differences(s0_over_km, kp_over_s0, share):
    km, vmax = 40.0, 0.37
    s0 = km * s0_over_km
    kp = s0 * kp_over_s0
    time = time_to(share, s0, vmax, km, kp)
    loss = 0.8 / time
    arguments = (s0, vmax, km, time, kp, loss)
    by = slopes(progress(*arguments), *arguments)

    def product(s0, vmax, km, kp, loss):
        return exact(s0, vmax, km, Decimal(time), 1 / kp, loss)[0]

    point = {"s0": s0, "vmax": vmax, "km": km, "kp": kp, "loss": loss}
    point = {name: Decimal(float(value)) for name, value in point.items()}
    for name, found in zip(point, (by.substrate, by.vmax, by.km, by.kp, by.loss), strict=True):
        step = point[name] * Decimal("1e-17")
        up, down = (product(**{**point, name: point[name] + sign * step}) for sign in (1, -1))
        assert off(found, (up - down) / (2 * step)) < 1e-9 + 1e-15 * s0_over_km, name


def test_without_product_inhibition_or_loss_the_optional_slopes_are_those_of_the_limit():
    arguments = (50.0, 0.2, 40.0, 100.0)
    at = progress(*arguments)
    by = slopes(at, *arguments)
    assert by.kp == 0.0
    gentle = slopes(progress(*arguments, np.inf, 1e-12), *arguments, np.inf, 1e-12)
    np.testing.assert_allclose(by.loss, gentle.loss, rtol=1e-9)
    np.testing.assert_allclose(by.loss, -at.rate_um_per_s * 100.0**2 / 2.0, rtol=1e-12)


@given(s0_over_km=ratio, share=st.floats(1e-6, 0.999))
def test_the_rate_is_the_law_at_what_is_left(s0_over_km, share):
    km, vmax, kp, loss = 40.0, 0.37, 90.0, 1e-3
    s0 = km * s0_over_km
    time = min(time_to(share, s0, vmax, km, kp), 2e3)
    at = progress(s0, vmax, km, time, kp, loss)
    activity = vmax * np.exp(-loss * time)
    expected = activity * at.left_um / (km * (1 + (s0 - at.left_um) / kp) + at.left_um)
    np.testing.assert_allclose(at.rate_um_per_s, expected, rtol=1e-9)


def test_low_substrate_is_first_order_and_high_substrate_a_straight_line():
    time = np.array([1.0, 50.0, 400.0])
    np.testing.assert_allclose(
        product_formed(1e-9, 0.2, 40.0, time), -1e-9 * np.expm1(-0.005 * time), rtol=1e-10
    )
    np.testing.assert_allclose(product_formed(1e9, 0.2, 40.0, time), 0.2 * time, rtol=1e-6)


def test_nothing_happens_without_time_substrate_or_enzyme():
    assert product_formed(50.0, 0.2, 40.0, 0.0) == 0.0
    assert product_formed(0.0, 0.2, 40.0, 100.0) == 0.0
    assert product_formed(50.0, 0.0, 40.0, 100.0) == 0.0


def test_a_finished_reaction_stands_at_its_substrate_without_overflow():
    at = progress(np.array([1e-6, 50.0, 1e9]), 10.0, 1e-3, 1e12, np.array([np.inf, 1e-3, 5.0]))
    assert np.all(at.product_um == np.array([1e-6, 50.0, 1e9]))
    assert np.all(at.left_um >= 0)
    assert np.all(np.isfinite(at.left_um))


def test_an_enzyme_that_dies_stops_at_its_effective_time():
    assert effective_time(1e9, 0.01) == pytest.approx(100.0)
    assert effective_time(37.0, 0.0) == 37.0
    np.testing.assert_allclose(effective_time(37.0, 1e-14), 37.0, rtol=1e-12)
    np.testing.assert_allclose(
        product_formed(50.0, 0.2, 40.0, 1e9, loss_per_s=0.01), product_formed(50.0, 0.2, 40.0, 100.0)
    )


@given(values=st.lists(st.floats(0.0, 5e3), min_size=2, max_size=9), place=st.integers(0, 8))
def test_a_value_does_not_depend_on_what_else_is_in_the_array(values, place):
    times = np.array(values)
    place %= times.size
    together = product_formed(50.0, 0.2, 40.0, times, 3.0, 1e-4)
    alone = product_formed(50.0, 0.2, 40.0, times[place : place + 1], 3.0, 1e-4)
    assert together[place] == alone[0]
