"""Outliers, control window and median polish of published data; each expected value names its source."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from models.statistics.outliers import critical_distance, generalised_esd, grubbs
from models.statistics.plate_quality import control_window
from models.statistics.position import median_polish

ZARR13 = Path(__file__).resolve().parents[3] / "shared" / "reference" / "nist_handbook_zarr13.csv"

# NIST/SEMATECH e-Handbook (doi:10.18434/M32189), 1.3.5.17.3, from Rosner 1983
# (doi:10.1080/00401706.1983.10487848): 54 values, R and lambda cut to 3 decimals.
_ROSNER_TEXT = """
-0.25 0.68 0.94 1.15 1.20 1.26 1.26 1.34 1.38 1.43 1.49 1.49 1.55 1.56 1.58 1.65 1.69 1.70 1.76 1.77 1.81 1.91
1.94 1.96 1.99 2.06 2.09 2.10 2.14 2.15 2.23 2.24 2.26 2.35 2.37 2.40 2.47 2.54 2.62 2.64 2.90 2.92 2.92 2.93
3.21 3.26 3.30 3.59 3.68 4.30 4.64 5.34 5.42 6.01
"""
ROSNER = np.array([float(value) for value in _ROSNER_TEXT.split()])
ROSNER_R = [3.118, 2.942, 3.179, 2.810, 2.815, 2.848, 2.279, 2.310, 2.101, 2.067]
ROSNER_LAMBDA = [3.158, 3.151, 3.143, 3.136, 3.128, 3.120, 3.111, 3.103, 3.094, 3.085]

# NIST/SEMATECH e-Handbook, 1.3.5.17.1 (Tietjen and Moore 1972): eight readings of a uranium isotope; values
# and data from memory.
URANIUM = np.array([199.31, 199.53, 200.19, 200.82, 201.92, 201.95, 202.18, 245.57])


def test_rosners_table() -> None:
    found = generalised_esd(ROSNER, most=10, level=0.05)
    assert found.statistics == pytest.approx(ROSNER_R, abs=0.001)
    assert found.critical == pytest.approx(ROSNER_LAMBDA, abs=0.001)
    assert found.outlier_count == 3
    assert ROSNER[found.outliers].tolist() == [6.01, 5.42, 5.34]


def test_rosners_example_masks_its_outliers_from_grubbs() -> None:
    # 3.118 is below 3.158: no outlier at 0.05, though there are three.
    assert grubbs(ROSNER).statistic == pytest.approx(3.118, abs=0.001)
    assert grubbs(ROSNER).p_value > 0.05


def test_grubbs_example() -> None:
    found = grubbs(URANIUM)
    assert found.statistic == pytest.approx(2.4687, abs=0.0001)
    assert URANIUM[found.position] == 245.57
    # Its one-sided critical value at 0.05.
    assert critical_distance(8, 0.05, sides=1) == pytest.approx(2.032, abs=0.0005)
    assert found.p_value < 0.01


@pytest.mark.skipif(not ZARR13.is_file(), reason="the reference data (../shared/reference) are not here")
def test_grubbs_of_calibration_factors() -> None:
    # NIST/SEMATECH e-Handbook, 1.4.2.8 (ZARR13.DAT): G and its critical value from memory, to 1e-4.
    values = np.loadtxt(ZARR13, skiprows=1)
    found = grubbs(values)
    assert values.size == 195
    assert found.statistic == pytest.approx(2.91867, abs=1e-4)
    assert critical_distance(195, 0.05) == pytest.approx(3.5979, abs=1e-4)
    assert found.p_value > 0.05


def test_z_prime_of_constructed_wells() -> None:
    # Formula: Zhang, Chung and Oldenburg 1999 (doi:10.1177/108705719900400206); the wells are constructed and
    # the results recomputed from it outside this project.
    reference = [98.2, 101.5, 99.8, 100.6, 97.9, 102.0, 100.1, 99.9]
    blank = [10.2, 9.6, 10.9, 9.1, 10.4, 9.8, 10.0, 10.1]
    values = np.array([*reference, *blank])
    found = control_window(np.zeros(16, dtype=int), np.arange(16) < 8, values, 1)
    assert found.z_prime[0] == pytest.approx(0.9343697065908071, rel=1e-10)
    assert found.signal_to_blank[0] == pytest.approx(9.987515605493135, rel=1e-10)
    assert 100 * found.reference_sd[0] / found.reference_mean[0] == pytest.approx(1.430284686946721, rel=1e-9)
    assert 100 * found.blank_sd[0] / found.blank_mean[0] == pytest.approx(5.376785575762245, rel=1e-9)


def test_median_polish_of_parachute_deaths() -> None:
    # Velleman and Hoaglin 1981, Applications, Basics, and Computing of Exploratory Data Analysis, p. 224
    # (ISBN 0-87150-409-X), as worked in the manual of R's medpolish; from memory.
    deaths = np.array([[14.0, 15, 14], [7, 4, 7], [8, 2, 10], [15, 9, 10], [0, 2, 0]])
    found = median_polish(deaths[None])
    assert found.overall[0] == 8
    assert found.row[0].tolist() == [6, -1, 0, 2, -8]
    assert found.column[0].tolist() == [0, -1, 0]
    assert np.abs(found.residual).sum() == 19
