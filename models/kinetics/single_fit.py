"""One fit for a notebook: its table, curve, band, profiles and figures.

Holds a fit and hands out what follows from it; fits nothing itself and reads no files.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike
from scipy.stats import t as t_distribution

from models.errors import HalfsatError, UnknownName
from models.kinetics.intervals import profile_curve
from models.kinetics.law_fits import LawFit
from models.kinetics.laws import Conditions, RateLaw, at_levels
from models.kinetics.laws.law import Floats
from models.kinetics.refusals import RefusalKind

if TYPE_CHECKING:
    from matplotlib.figure import Figure


class FitRefused(HalfsatError):
    """Rates that no candidate law can be fitted to.

    Attributes
    ----------
    kind
        What is wrong, as in `FitResult.refusals`.
    """

    def __init__(self, kind: RefusalKind, reason: str) -> None:
        self.kind = kind
        super().__init__(reason, remedy="see the rates and levels, or try another law")

    def __reduce__(self) -> tuple[object, ...]:
        return type(self), (self.kind, self.what)


@dataclass(frozen=True)
class Fit:
    """The law chosen for a set of rates.

    Attributes
    ----------
    law
        The rate law.
    constants
        A row a constant: constant, value, standard_error, low, high, unit; low and high are NaN where the
        95 % interval is open.
    covariance
        Of the constants, in order; NaN where it is not known.
    converged, trusted, distrust
        Whether the search came to rest, whether its uncertainty can be trusted, and why not.
    residual_sum, degrees_of_freedom
        Weighted sum of squared residuals, and rates less constants.
    candidates
        A row a law that could be fitted, the simplest first: law, chosen, aicc, evidence_weight, trusted,
        distrust.
    conditions, rates, weights
        What was fitted; weights are one over the variance up to a factor.
    law_fit
        The fit as the engine gives it.
    rate_unit, concentration_unit
        Units of the data.
    """

    law: RateLaw
    constants: pd.DataFrame
    covariance: Floats = field(repr=False)
    converged: bool
    trusted: bool
    distrust: str | None
    residual_sum: float
    degrees_of_freedom: int
    candidates: pd.DataFrame
    conditions: Conditions = field(repr=False)
    rates: Floats = field(repr=False)
    weights: Floats = field(repr=False)
    law_fit: LawFit = field(repr=False)
    rate_unit: str
    concentration_unit: str

    def table(self) -> pd.DataFrame:
        """Constants by name, with value, standard_error, low, high and unit."""
        return self.constants.set_index("constant")

    def correlation(self) -> pd.DataFrame:
        """Correlation of the constants."""
        errors = np.sqrt(np.diag(self.covariance))
        names = self.constants["constant"].tolist()
        return pd.DataFrame(self.covariance / np.outer(errors, errors), index=names, columns=names)

    def rate(
        self, substrate: ArrayLike, modulator: ArrayLike | None = None, enzyme: ArrayLike | None = None
    ) -> Floats:
        """Fitted rate at other concentrations, in the units of the data; shape as broadcast."""
        given = [substrate, *(each for each in (modulator, enzyme) if each is not None)]
        arrays = np.broadcast_arrays(*(np.asarray(each, dtype=np.float64) for each in given))
        flat = [each.reshape(-1, 1) for each in arrays]
        rest = iter(flat[1:])
        conditions = at_levels(
            flat[0],
            None if modulator is None else next(rest),
            None if enzyme is None else next(rest),
        )
        values = tuple(np.array([value]) for value in self.constants["value"])
        with np.errstate(all="ignore"):
            rates: Floats = np.asarray(self.law.rate(conditions, values), dtype=np.float64)
        return rates.reshape(arrays[0].shape)

    def curve(self, points: int = 200) -> pd.DataFrame:
        """Plot data: fitted rate from zero to the highest substrate, a curve for each modulator level.

        Returns
        -------
        DataFrame
            Columns substrate, modulator (NaN without one) and rate; along the modulator for a law of one
            substrate level.
        """
        substrate = self.conditions.substrate_um[:, 0]
        modulator = None if self.conditions.modulator_um is None else self.conditions.modulator_um[:, 0]
        enzyme = None if self.conditions.enzyme_um is None else self._enzyme()
        along = substrate
        if modulator is not None and np.unique(substrate).size == 1:
            along = modulator
        # Half of them evenly along a straight axis, half along a logarithmic one from below the lowest level.
        even, above_zero = points - points // 2, along[along > 0]
        lowest = min(0.5 * above_zero.min() / along.max(), 0.5) if above_zero.size else 1e-3
        low = np.geomspace(lowest, 1.0, points // 2, endpoint=False)
        steps = np.sort(np.concatenate([np.linspace(0.0, 1.0, even), low]))
        if modulator is None:
            levels = substrate.max() * steps
            return pd.DataFrame({"substrate": levels, "modulator": np.nan, "rate": self.rate(levels)})
        if np.unique(substrate).size == 1:
            pairs = [(np.full(points, substrate[0]), modulator.max() * steps)]
        else:
            pairs = [(substrate.max() * steps, np.full(points, level)) for level in np.unique(modulator)]
        s, i = (np.concatenate(each) for each in zip(*pairs, strict=True))
        return pd.DataFrame({"substrate": s, "modulator": i, "rate": self.rate(s, i, enzyme)})

    def band(self, points: int = 200) -> pd.DataFrame:
        """`curve` with the ends of the fitted rate's 95 % confidence interval: columns low and high.

        By the derivatives of the rate and the covariance of the constants (delta method: Bates and Watts
        1988, doi:10.1002/9780470316757, section 2.3); NaN where the covariance is not known.
        """
        curve = self.curve(points)
        enzyme = None if self.conditions.enzyme_um is None else np.full(len(curve), self._enzyme())
        substrate = curve["substrate"].to_numpy(dtype=np.float64)
        modulator = None if curve["modulator"].isna().all() else curve["modulator"].to_numpy(np.float64)
        conditions = at_levels(
            substrate[:, None],
            None if modulator is None else modulator[:, None],
            None if enzyme is None else enzyme[:, None],
        )
        values = tuple(np.array([value]) for value in self.constants["value"])
        with np.errstate(all="ignore"):
            gradient = np.stack([column[:, 0] for column in self.law.gradient(conditions, values)])
            variance = np.einsum("ip,ij,jp->p", gradient, self.covariance, gradient)
            reach = t_distribution.ppf(0.975, self.degrees_of_freedom) * np.sqrt(variance)
        return curve.assign(low=curve["rate"] - reach, high=curve["rate"] + reach)

    def figure(self, log_substrate: bool = False, theme: str = "light") -> Figure:
        """Rates with the fitted law, its 95 % band and the residuals beneath.

        Parameters
        ----------
        log_substrate
            Whether the horizontal axis is logarithmic.
        theme
            light, dark or print.

        Examples
        --------
        >>> from models.kinetics import fit_michaelis_menten
        >>> found = fit_michaelis_menten([10, 20, 40, 80, 160], [11, 20, 33, 50, 67])
        >>> figure = found.figure()
        >>> [axes.get_ylabel() for axes in figure.axes]
        ['rate, µM/s', 'residual,\\nµM/s']
        """
        # Here, since drawing takes a second to import and most fits are never drawn.
        from models.figures.drawing import quantity
        from models.figures.kinetics import FittedLine, draw_rates
        from models.figures.theme import THEMES

        curve = self.band()
        substrate = self.conditions.substrate_um[:, 0]
        modulator = None if self.conditions.modulator_um is None else self.conditions.modulator_um[:, 0]
        fitted = self.rate(
            substrate, modulator, None if self.conditions.enzyme_um is None else self._enzyme()
        )
        along = "substrate" if modulator is None or np.unique(substrate).size > 1 else "modulator"
        several = along == "substrate" and modulator is not None
        lines = [
            FittedLine(
                part[along].to_numpy(dtype=np.float64),
                part["rate"].to_numpy(dtype=np.float64),
                part["low"].to_numpy(dtype=np.float64),
                part["high"].to_numpy(dtype=np.float64),
                f"{level:g}" if several else "",
            )
            for level, part in (curve.groupby("modulator") if several else [(0.0, curve)])
        ]
        return draw_rates(
            substrate if along == "substrate" or modulator is None else modulator,
            self.rates,
            fitted,
            lines,
            x_label=along,
            x_unit=self.concentration_unit,
            rate_unit=self.rate_unit,
            lines_title=quantity("modulator", self.concentration_unit),
            logarithmic=log_substrate,
            theme=THEMES[theme],
        )

    def profile(self, constant: str, points: int = 61) -> pd.DataFrame:
        """Profile likelihood of a constant: how much worse the best fit becomes as it is held elsewhere.

        Parameters
        ----------
        constant
            Its name.
        points
            Rows, odd so that the fitted value is one of them.

        Returns
        -------
        DataFrame
            Columns value, rise (of the weighted sum of squares over the residual variance; NaN where there is
            no profile: a fit that did not converge, or without residuals) and limit (the rise at which the
            95 % interval ends).

        Raises
        ------
        UnknownName
            If the law has no such constant.

        Examples
        --------
        >>> from models.kinetics import fit_michaelis_menten
        >>> found = fit_michaelis_menten([10, 20, 40, 80, 160], [11, 20, 33, 50, 67])
        >>> profile = found.profile("km")
        >>> inside = profile[profile["rise"] < profile["limit"]]
        >>> bool(inside["value"].between(*found.table().loc["km", ["low", "high"]]).all())
        True
        """
        row = self._row(constant)
        values, rise, limit = profile_curve(
            self.law_fit,
            self.conditions,
            self.rates[:, None],
            self.weights[:, None],
            0,
            row,
            (float(self.constants["low"].iloc[row]), float(self.constants["high"].iloc[row])),
            points,
        )
        return pd.DataFrame({"value": values, "rise": rise, "limit": limit})

    def profile_figure(self, constant: str, theme: str = "light") -> Figure:
        """`profile` drawn, with the ends of the 95 % interval.

        Parameters
        ----------
        constant
            Its name.
        theme
            light, dark or print.
        """
        from models.figures.kinetics import draw_profile
        from models.figures.theme import THEMES

        profile, row = self.profile(constant), self.constants.iloc[self._row(constant)]
        return draw_profile(
            profile["value"].to_numpy(dtype=np.float64),
            profile["rise"].to_numpy(dtype=np.float64),
            float(profile["limit"].iloc[0]),
            (float(row["low"]), float(row["high"])),
            constant,
            str(row["unit"]),
            THEMES[theme],
        )

    def _row(self, constant: str) -> int:
        names = self.constants["constant"].tolist()
        if constant not in names:
            raise UnknownName(
                f"{self.law.title} has no constant '{constant}'",
                remedy=f"its constants are {', '.join(names)}",
            )
        return names.index(constant)

    def _enzyme(self) -> float:
        assert self.conditions.enzyme_um is not None
        return float(self.conditions.enzyme_um[0, 0])
