"""Published fits that map on a law here, fitted again, with the digits on which both agree.

Every expected number stands beside its source. Data come from fixtures/reference.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import LawFit, fit_law
from models.kinetics.laws import MICHAELIS_MENTEN, at_levels

REFERENCE = Path(__file__).resolve().parents[2] / "fixtures" / "reference"

NIST = "NIST StRD Misra1d, certified to 11 digits"
BATES_WATTS = "Bates and Watts 1988; digits from R 4.2 nls"
WILKINSON = "Wilkinson 1961; full least squares with R 4.2 nls"

PUROMYCIN = {
    "treated": {
        "vmax": (212.683579974954, 6.94714625585884, 197.302128475879, 229.290064892619),
        "km": (0.0641210273949488, 0.00828092241996549, 0.0469251683939529, 0.0861599529872355),
    },
    "untreated": {
        "vmax": (160.280124911882, 6.48025103181053, 145.636953611589, 176.544400897885),
        "km": (0.0477083061979907, 0.00778189125174772, 0.0313745976881847, 0.0700613060906),
    },
}
"""Value, standard error and 95 % profile interval: R 4.2 nls on the data of Bates and Watts 1988, A1.3.

nls stops at a relative offset of 1e-5, and its profile interpolates: its digits, not those here, set the
tolerances.
"""


@dataclass(frozen=True)
class Agreement:
    """A published value and what is found here.

    Attributes
    ----------
    needed
        Digits on which both must agree, as many as the published value carries.
    """

    dataset: str
    quantity: str
    published: float
    found: float
    needed: float
    source: str

    @property
    def digits(self) -> float:
        """Digits of agreement: -log10 of the relative difference, 15 at most."""
        difference = abs(self.found - self.published) / abs(self.published)
        return 15.0 if difference < 1e-15 else float(-np.log10(difference))

    @property
    def agrees(self) -> bool:
        """Whether the digits needed are reached; never for a value that was not found."""
        return bool(np.isfinite(self.found) and self.digits >= self.needed)


def agreements() -> list[Agreement]:
    """Every published value with what is found here."""
    return [*_misra1d(), *_puromycin(), *_wilkinson()]


def _read(name: str) -> pd.DataFrame:
    return pd.read_csv(REFERENCE / name, comment="#")


def _fit(
    substrate: np.ndarray, rate: np.ndarray, start: tuple[float, float] | None = None
) -> tuple[LawFit, np.ndarray, np.ndarray]:
    conditions, rates = at_levels(substrate[:, None]), rate[:, None]
    starts = None if start is None else np.array(start)[:, None]
    fit = fit_law(MICHAELIS_MENTEN, conditions, rates, start=starts)
    return (fit, *profile_intervals(fit, conditions, rates, np.ones_like(rates)))


def _misra1d() -> Iterator[Agreement]:
    """Both published starts; b2 = 1 / km, so its standard error is that of km over km squared."""
    data = _read("nist_misra1d.csv")
    for number, (b1, b2) in enumerate(((500.0, 0.0001), (450.0, 0.0003)), start=1):
        fit, _, _ = _fit(data["x_1"].to_numpy(float), data["y_1"].to_numpy(float), (b1, 1.0 / b2))
        (vmax, km), (vmax_error, km_error) = fit.constants[:, 0], fit.standard_error[:, 0]
        certified = {
            "b1": (437.36970754, vmax),
            "b2": (3.0227324449e-04, 1.0 / km),
            "standard error of b1": (3.6489174345, vmax_error),
            "standard error of b2": (2.9334354479e-06, km_error / km**2),
            "residual sum of squares": (0.056419295283, fit.residual_sum[0]),
        }
        for quantity, (published, found) in certified.items():
            yield Agreement(f"Misra1d, start {number}", quantity, published, float(found), 6.0, NIST)


def _puromycin() -> Iterator[Agreement]:
    data = _read("puromycin.csv")
    for state, expected in PUROMYCIN.items():
        rows = data[data["state"] == state]
        fit, low, high = _fit(rows["conc_ppm"].to_numpy(float), rows["rate_counts_per_min2"].to_numpy(float))
        for row, (constant, (value, error, lower, upper)) in enumerate(expected.items()):
            found = (fit.constants[row, 0], fit.standard_error[row, 0], low[row, 0], high[row, 0])
            names = (constant, f"standard error of {constant}", f"{constant} low", f"{constant} high")
            for name, published, mine, needed in zip(
                names, (value, error, lower, upper), found, (5.0, 4.0, 2.7, 2.7), strict=True
            ):
                yield Agreement(f"Puromycin, {state}", name, published, float(mine), needed, BATES_WATTS)


def _wilkinson() -> Iterator[Agreement]:
    """The paper prints 0.690 and 0.595 (from memory), after one step; full least squares differs."""
    data = _read("wilkinson_1961.csv")
    fit, low, high = _fit(data["s_mM"].to_numpy(float), data["v_umol_per_3min_per_mg"].to_numpy(float))
    expected = {
        "vmax": (0.690399473629394, fit.constants[0, 0], 5.0),
        "km": (0.596547938641419, fit.constants[1, 0], 5.0),
        "standard error of vmax": (0.0368245973607381, fit.standard_error[0, 0], 4.0),
        "standard error of km": (0.0682571206487482, fit.standard_error[1, 0], 4.0),
        "vmax low": (0.598987642722851, low[0, 0], 2.7),
        "vmax high": (0.810783029700612, high[0, 0], 2.7),
        "km low": (0.433742665362454, low[1, 0], 2.7),
        "km high": (0.829534649829059, high[1, 0], 2.7),
    }
    for quantity, (published, found, needed) in expected.items():
        yield Agreement("Wilkinson 1961", quantity, published, float(found), needed, WILKINSON)
