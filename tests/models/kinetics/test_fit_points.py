"""Leverage and studentised residuals against their definitions, by brute force; p values in the result."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from scipy.optimize import curve_fit

from models.kinetics.fitting import fit_rates
from models.kinetics.laws import HILL, at_levels
from models.kinetics.least_squares import Minimum
from models.kinetics.stragglers import settle

LEVELS_UM = 80.0 * np.geomspace(0.125, 12.0, 8)


def rates(seed: int = 3, series: int = 2, error: float = 0.0006) -> pd.DataFrame:
    generator = np.random.default_rng(seed)
    level = np.tile(np.repeat(LEVELS_UM, 3), series)
    v = 0.05 * level / (80.0 + level)
    return pd.DataFrame(
        {
            "series": np.repeat(np.arange(series), 24),
            "plate": 0,
            "substrate_um": level,
            "nominal_substrate_um": level,
            "v_um_per_s": v * (1 + 0.02 * generator.standard_normal(v.size))
            + error * generator.standard_normal(v.size),
            "v_se_um_per_s": error,
        },
        index=[f"well {number}" for number in range(v.size)],
    )


def michaelis_menten(s, vmax, km):
    return vmax * s / (km + s)


def test_every_rate_of_the_chosen_law_is_there_once_with_its_row():
    frame = rates()
    points = fit_rates(frame, [("michaelis_menten", "hill")] * 2).points
    assert points["row"].tolist() == frame.index.tolist()
    assert set(points["law"]) == {"michaelis_menten"}
    np.testing.assert_array_equal(points["v_um_per_s"], frame["v_um_per_s"])


def test_leverage_is_the_diagonal_of_the_hat_matrix():
    frame = rates(series=1)
    result = fit_rates(frame, [("michaelis_menten",)])
    points = result.points
    vmax, km = result.constants["value"]
    s, w = points["substrate_um"].to_numpy(), points["v_sd_um_per_s"].to_numpy() ** -2
    jacobian = np.stack([s / (km + s), -vmax * s / (km + s) ** 2], axis=1) * np.sqrt(w)[:, None]
    hat = jacobian @ np.linalg.inv(jacobian.T @ jacobian) @ jacobian.T
    np.testing.assert_allclose(points["leverage"], np.diag(hat), rtol=1e-6)
    assert points["leverage"].sum() == pytest.approx(2.0)
    np.testing.assert_allclose(points["fitted_um_per_s"], michaelis_menten(s, vmax, km), rtol=1e-9)


def test_a_studentised_residual_is_that_of_a_fit_without_the_point():
    frame = rates(series=1)
    points = fit_rates(frame, [("michaelis_menten",)]).points
    s, v, sd = (points[name].to_numpy() for name in ("substrate_um", "v_um_per_s", "v_sd_um_per_s"))
    for left_out in (0, 11, 23):
        kept = np.arange(s.size) != left_out
        found, covariance = curve_fit(michaelis_menten, s[kept], v[kept], (0.05, 80.0), sigma=sd[kept])
        vmax, km = found
        at = s[left_out]
        gradient = np.array([at / (km + at), -vmax * at / (km + at) ** 2])
        residual = v[kept] - michaelis_menten(s[kept], *found)
        scale = np.sum((residual / sd[kept]) ** 2) / (kept.sum() - 2)
        error = np.sqrt(scale * sd[left_out] ** 2 + gradient @ covariance @ gradient)
        expected = (v[left_out] - michaelis_menten(at, *found)) / error
        # The tangent plane moves a little without the point: by 1 % at most here.
        assert points["studentised_residual"][left_out] == pytest.approx(expected, rel=0.02, abs=0.005)


def test_a_wrong_law_shows_in_lack_of_fit_and_in_runs_and_a_right_one_in_neither():
    frame = rates()
    s = frame["substrate_um"]
    frame.loc[frame["series"] == 1, "v_um_per_s"] *= (s**2 / (80.0**2 + s**2)) / (s / (80.0 + s))
    fits = fit_rates(frame, [("michaelis_menten",)] * 2).fits.set_index("series")
    assert fits.loc[0, "lack_of_fit_p"] > 0.05
    assert fits.loc[1, "lack_of_fit_p"] < 1e-6
    assert fits.loc[1, "runs_p"] < fits.loc[0, "runs_p"]


def test_without_replicates_lack_of_fit_is_not_known():
    frame = rates(series=1).iloc[::3]
    fits = fit_rates(frame, [("michaelis_menten",)]).fits
    assert fits["lack_of_fit_p"].isna().all()


def test_points_do_not_depend_on_the_batch():
    frame = rates(series=3)
    together = fit_rates(frame, [("michaelis_menten",)] * 3)
    alone = fit_rates(frame[frame["series"] == 2].assign(series=0, plate=0), [("michaelis_menten",)])
    mine = together.points[together.points["series"] == 2].reset_index(drop=True)
    # Weights pool the plate's scatter, so that only the order of sums is compared: same rows, same place.
    assert mine["row"].tolist() == alone.points["row"].tolist()


def test_no_rates_give_no_points():
    empty = fit_rates(rates().iloc[:0], [("michaelis_menten",)])
    assert empty.points.empty
    assert "studentised_residual" in empty.points.columns


def test_blocks_of_plates_give_what_one_block_gives(monkeypatch):
    frame = pd.concat(
        [
            rates(seed=seed).assign(series=lambda f, s=seed: f["series"] + 2 * s, plate=seed)
            for seed in range(4)
        ]
    )
    laws = [("michaelis_menten", "hill")] * 9
    whole = fit_rates(frame, laws)
    monkeypatch.setattr("models.kinetics.fitting.BLOCK", 3)
    parts = fit_rates(frame.sample(frac=1.0, random_state=1), laws)
    for name in ("fits", "constants", "refusals"):
        pd.testing.assert_frame_equal(getattr(whole, name), getattr(parts, name))
    assert whole.plate_cv == parts.plate_cv
    np.testing.assert_array_equal(np.sort(parts.points["place"]), np.arange(len(frame)))
    assert parts.points["place"].is_monotonic_increasing
    assert set(parts.refusals["series"]) == {8}


def test_a_series_that_scipy_settles_does_not_depend_on_the_longest_of_its_batch():
    """Places that only fill an array, of weight 0, must not change a sum's last bit."""
    generator = np.random.default_rng(2)
    substrate = np.repeat(LEVELS_UM, 3)[:, None]
    rate = 0.05 * substrate / (80.0 + substrate) * (1 + 0.4 * generator.standard_normal((24, 1)))
    found = []
    for filling in (0, 7, 40):
        filled = [np.pad(each, ((0, filling), (0, 0)), constant_values=1.0) for each in (substrate, rate)]
        weights = np.pad(1.0 + rate**2, ((0, filling), (0, 0)))
        start = Minimum(np.ones(1), np.array([[4.0], [1.2]]), np.full(1, np.inf), np.zeros(1, dtype=bool))
        limits = np.array([[0.0], [0.2]]), np.array([[9.0], [5.0]])
        settled = settle(HILL, at_levels(filled[0]), filled[1], weights, start, *limits)
        found.append(
            (settled.amplitude.tolist(), settled.coordinates.tolist(), settled.residual_sum.tolist())
        )
    assert found[0][:2] == found[1][:2] == found[2][:2]
