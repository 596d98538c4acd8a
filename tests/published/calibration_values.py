"""Published standard curves, fitted again here, with the digits on which both agree.

Every expected number stands beside its source. Data come from fixtures/reference.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from models.calibration.calibration import Calibration
from models.calibration.standard_curve import calibrate
from tests.published.published_values import Agreement

REFERENCE = Path(__file__).resolve().parents[2] / "fixtures" / "reference"

NORRIS = "NIST StRD Norris, certified to 15 digits"
PONTIUS = "NIST StRD Pontius, certified to 15 digits"
LINE_WIDTH = "NIST/SEMATECH e-Handbook 2.3.6.7.3; digits from R 4.2 lm"
LOAD_CELL = "NIST/SEMATECH e-Handbook 2.3.6.5; digits from R 4.2 lm"
DNASE = "Davidian and Giltinan 1995, 5.2.4; R 4.2 nls, SSfpl, which stops at a relative offset of 1e-5"


def published_curve(file_name: str, product: str, signal: str, model: str) -> Calibration:
    """The curve through one published table, unweighted."""
    data = pd.read_csv(REFERENCE / file_name, comment="#")
    found = calibrate(data[product].to_numpy(float), data[signal].to_numpy(float), model)
    assert isinstance(found, Calibration), found
    return found


def calibration_agreements() -> list[Agreement]:
    """Every published value of a standard curve with what is found here."""
    return [*_norris(), *_pontius(), *_line_width(), *_load_cell(), *_dnase()]


def _compare(
    dataset: str,
    source: str,
    needed: float,
    curve: Calibration,
    values: tuple[float, ...],
    errors: tuple[float, ...],
    residual_sd: float,
) -> list[Agreement]:
    names = curve.shape.parameters
    pairs = [
        *zip(names, values, curve.parameters, strict=True),
        *zip([f"{name} SE" for name in names], errors, curve.standard_errors, strict=True),
        ("residual sd", residual_sd, curve.residual_sd),
    ]
    return [Agreement(dataset, name, known, float(found), needed, source) for name, known, found in pairs]


def _norris() -> list[Agreement]:
    return _compare(
        "Norris",
        NORRIS,
        10.0,
        published_curve("nist_norris.csv", "x_1", "y_1", "linear"),
        (-0.262323073774029, 1.00211681802045),
        (0.232818234301152, 0.429796848199937e-3),
        0.884796396144373,
    )


def _pontius() -> list[Agreement]:
    return _compare(
        "Pontius",
        PONTIUS,
        10.0,
        published_curve("nist_pontius.csv", "x_1", "y_1", "quadratic"),
        (0.673565789473684e-3, 0.732059160401003e-6, -0.316081871345029e-14),
        (0.107938612033077e-3, 0.157817399981659e-9, 0.486652849992036e-16),
        0.205177424076185e-3,
    )


def _line_width() -> list[Agreement]:
    return _compare(
        "line width",
        LINE_WIDTH,
        9.0,
        published_curve("nist_linewidth.csv", "reference_um", "measured_um", "linear"),
        (0.235762290292987, 0.987037714284589),
        (0.0243003442080555, 0.00344058033672319),
        0.062031959377696,
    )


def _load_cell() -> list[Agreement]:
    return _compare(
        "load cell",
        LOAD_CELL,
        9.0,
        published_curve("nist_load_cell.csv", "load_1", "response_1", "quadratic"),
        (-1.83980467268537e-05, 0.100102485397365, 7.03186511481846e-06),
        (2.45072198938303e-05, 4.83869944763058e-06, 2.01361279389916e-07),
        3.76402941993685e-05,
    )


def _dnase() -> list[Agreement]:
    """R fits the logarithm of half (xmid) and the reciprocal of hill (scal): its errors by the chain rule."""
    curve = published_curve("dnase_run1.csv", "conc_ng_per_mL", "density_1", "four_parameter")
    _, _, half, hill = curve.parameters
    found = {
        "A": curve.parameters[0],
        "B": curve.parameters[1],
        "xmid": np.log(half),
        "scal": 1.0 / hill,
        "A SE": curve.standard_errors[0],
        "B SE": curve.standard_errors[1],
        "xmid SE": curve.standard_errors[2] / half,
        "scal SE": curve.standard_errors[3] / hill**2,
        "residual sd": curve.residual_sd,
    }
    known = {
        "A": -0.00789719367545215,
        "B": 2.37723902064352,
        "xmid": 1.50740306321704,
        "scal": 1.06257871806652,
        "A SE": 0.0171997075490898,
        "B SE": 0.109516349737944,
        "xmid SE": 0.102079855450265,
        "scal SE": 0.0569960577194871,
        "residual sd": 0.0198058386975481,
    }
    return [
        Agreement("DNase run 1", name, value, float(found[name]), 4.0 if "SE" in name else 5.0, DNASE)
        for name, value in known.items()
    ]
