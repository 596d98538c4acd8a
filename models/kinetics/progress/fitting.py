"""From whole progress curves to constants: all wells of a series at once by the integrated rate law.

The second estimate beside the initial rates, and the only one where no usable initial rate is left. Knows
neither gates nor lots; what cannot be fitted becomes a refusal.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from models.kinetics.curves import CurveBatch
from models.kinetics.progress.normal_equations import Constants
from models.kinetics.progress.series_fit import SeriesFits, fit_series
from models.kinetics.progress.wells import Wells, lay_out
from models.kinetics.refusals import Refusal, RefusalKind

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

LAW = "integrated_michaelis_menten"
FIT_COLUMNS = (
    "series",
    "law",
    "converged",
    "trusted",
    "distrust",
    "point_count",
    "well_count",
    "degrees_of_freedom",
    "weighted_residual_sum",
    "read_sd_um",
    "enzyme_cv",
    "substrate_cv",
    "highest_conversion",
    "residual_correlation_z",
)
CONSTANT_COLUMNS = ("series", "law", "constant", "value", "standard_error", "low", "high", "unit")
REFUSAL_COLUMNS = ("series", "kind", "reason")
INFLUENCE_COLUMNS = ("series", "well", "vmax", "km", "leverage")
UNITS = {"vmax": "umol/L/s", "km": "umol/L", "kp": "umol/L", "loss": "1/s", "dead_time": "s"}

CHUNK = 32
"""Series fitted at once: a few thousand reads each, so that the arrays stay within tens of megabytes."""
_CORRELATED = 4.0
"""Serial correlation of residuals beyond this many of its standard errors is no chance."""


@dataclass(frozen=True)
class ProgressOptions:
    """What is fitted to whole curves.

    Attributes
    ----------
    product_inhibition
        Whether the product inhibits competitively, with a fitted kp.
    enzyme_loss
        Whether the enzyme loses activity first-order, with a fitted rate constant.
    fit_dead_time
        Whether the time from start to time 0 is fitted, one for all wells, instead of taken as known.
    dead_time_s
        Known time from the start of the reaction to time 0 of the reads [s]; a number or one value a well.
    dispensing_cv
        Known coefficients of variation of enzyme and of substrate as dispensed [1]; None estimates them from
        the curves.
    """

    product_inhibition: bool = False
    enzyme_loss: bool = False
    fit_dead_time: bool = False
    dead_time_s: float | Floats = 0.0
    dispensing_cv: tuple[float, float] | None = None

    @property
    def constants(self) -> Constants:
        """The constants that are fitted."""
        optional = (
            ("kp", self.product_inhibition),
            ("loss", self.enzyme_loss),
            ("dead_time", self.fit_dead_time),
        )
        return Constants(("vmax", "km", *(name for name, wanted in optional if wanted)))


@dataclass(frozen=True)
class ProgressResult:
    """Fits of whole curves.

    Attributes
    ----------
    fits
        A row a fitted series with the columns of FIT_COLUMNS: degrees_of_freedom are wells less constants
        where dispensing errors are estimated, else reads less constants and offsets; residual_correlation_z
        is the serial correlation of the residuals over its standard error.
    constants
        A row a constant with the columns of CONSTANT_COLUMNS; low and high are NaN where the 95 % interval is
        open.
    refusals
        A row a series that is not fitted: series, kind, reason.
    covariance
        Covariance of the logarithms of the constants by series, in the order of the rows; NaN where not
        known.
    influence
        A row a well that was fitted: series, well (its row in the batch), and by how much leaving it out
        would move log vmax and log km (`vmax`, `km`), to first order; `leverage`, the share of its pull that
        its own part in the fit takes up [1].
    """

    fits: pd.DataFrame
    constants: pd.DataFrame
    refusals: pd.DataFrame
    covariance: Mapping[int, Floats] = field(repr=False)
    influence: pd.DataFrame = field(repr=False)


def fit_progress(
    batch: CurveBatch, series_count: int, options: ProgressOptions | None = None
) -> ProgressResult:
    """Fit the whole progress curves of every series by the integrated Michaelis-Menten law.

    The constants are shared by all wells of a series; each well has an offset of its own, and enzyme and
    substrate as dispensed, which scatter about the planned ones with CVs estimated by restricted maximum
    likelihood (nonlinear mixed model: Lindstrom and Bates 1990, doi:10.2307/2532087). Without that, the few
    per cent of dispensing error would be taken for thousands of precise reads that contradict each other, and
    the intervals would be far too narrow. The slope error of the blank is carried as well.

    Parameters
    ----------
    batch
        Curves of the wells to be used, with the blanks of their plates. Time counts from the start of the
        reaction, but for a dead time.
    series_count
        Number of series.
    options
        What is fitted; None for Michaelis-Menten with known time.

    Returns
    -------
    ProgressResult
    """
    options = options or ProgressOptions()
    dead_time_s = np.broadcast_to(np.asarray(options.dead_time_s, dtype=np.float64), (batch.well_count,))
    refused: dict[int, Refusal] = {}
    parts: list[_Part] = []
    for first in range(0, series_count, CHUNK):
        numbers = np.arange(first, min(first + CHUNK, series_count))
        mine = np.isin(batch.series, numbers)
        plates = np.unique(batch.plate[mine])
        rows = np.flatnonzero(mine | (batch.is_blank & np.isin(batch.plate, plates)))
        here = batch.select(rows)
        refused |= _refuse_wells(here, numbers)
        wells = lay_out(here, numbers, dead_time_s[rows])
        refused |= {n: r for n, r in _refuse_series(wells, numbers, options).items() if n not in refused}
        kept = np.array([k for k, n in enumerate(numbers) if int(n) not in refused], dtype=np.intp)
        if kept.size == 0:
            continue
        part = _fit(wells.select(kept).wells, numbers[kept], rows, options)
        refused |= part.refused
        parts.append(part)
    return _result(parts, refused)


def _refuse_wells(batch: CurveBatch, numbers: Integers) -> dict[int, Refusal]:
    refused = {}
    for number in numbers:
        mine = (batch.series == number) & ~batch.is_blank & ~batch.is_enzyme_blank
        if np.any(~np.isfinite(batch.substrate_um[mine])):
            refused[int(number)] = Refusal(
                RefusalKind.UNKNOWN_SUBSTRATE, "a curve has no known substrate concentration"
            )
    return refused


def _refuse_series(wells: Wells, numbers: Integers, options: ProgressOptions) -> dict[int, Refusal]:
    count = wells.by_series(np.ones(wells.substrate_um.size))
    reads = wells.by_series(wells.read_count)
    # Rises more than it falls: the last reads against the first.
    rise = wells.by_series(_rise(wells))
    needed = options.constants.count
    refused = {}
    for k, number in enumerate(numbers):
        if count[k] == 0:
            refusal = Refusal(RefusalKind.NO_RATES, "no usable progress curve in this series")
        elif reads[k] - count[k] <= needed:
            refusal = Refusal(
                RefusalKind.TOO_FEW_POINTS,
                f"{int(reads[k])} reads in {int(count[k])} wells; the integrated law needs more than its "
                f"{needed} constants and an offset a well",
            )
        elif not rise[k] > 0:
            refusal = Refusal(RefusalKind.NO_POSITIVE_RATE, "no product is formed over the reads")
        else:
            continue
        refused[int(number)] = refusal
    return refused


def _rise(wells: Wells) -> Floats:
    """Least-squares slope of each well [umol/L/s], shape (W,)."""
    count = np.maximum(wells.read_count, 1.0)
    centred = np.where(wells.used, wells.time_s - np.cumsum(wells.time_s, axis=0)[-1] / count, 0.0)
    over = np.cumsum(centred * centred, axis=0)[-1]
    slope: Floats = np.cumsum(centred * wells.product_um, axis=0)[-1] / np.maximum(over, 1e-300)
    return slope


@dataclass(frozen=True)
class _Part:
    """What came of some of the series."""

    fits: list[dict[str, object]]
    constants: list[dict[str, object]]
    covariance: dict[int, Floats]
    influence: pd.DataFrame
    refused: dict[int, Refusal]


def _fit(wells: Wells, numbers: Integers, rows: Integers, options: ProgressOptions) -> _Part:
    constants = options.constants
    fits = fit_series(wells, constants, options.dispensing_cv)
    part = _Part([], [], {}, pd.DataFrame(), {})
    kept = np.zeros(numbers.size, dtype=bool)
    for k, number in enumerate(int(n) for n in numbers):
        refusal = _refuse_fit(fits, k)
        if refusal is not None:
            part.refused[number] = refusal
            continue
        kept[k] = True
        part.fits.append(_fit_row(fits, k, number, constants))
        part.constants.extend(_constant_rows(fits, k, number, constants))
        part.covariance[number] = fits.log_covariance[k]
    mine = np.flatnonzero(kept[wells.series])
    influence = pd.DataFrame(
        {
            "series": numbers[wells.series[mine]],
            "well": rows[wells.row[mine]],
            "vmax": fits.influence[0, mine],
            "km": fits.influence[1, mine],
            "leverage": fits.leverage[mine],
        }
    )
    return replace(part, influence=influence)


def _refuse_fit(fits: SeriesFits, k: int) -> Refusal | None:
    if fits.at_limit[1, k]:
        side = "above" if fits.km_is_high[k] else "below"
        return Refusal(
            RefusalKind.NO_HALF_SATURATION, f"km lies {side} all substrate in these curves and cannot be told"
        )
    if not fits.converged[k]:
        return Refusal(
            RefusalKind.NOT_CONVERGED, "the search for the integrated rate law did not come to rest"
        )
    return None


def _fit_row(fits: SeriesFits, k: int, number: int, constants: Constants) -> dict[str, object]:
    distrust = _distrust(fits, k, constants)
    return {
        "series": number,
        "law": LAW,
        "converged": True,
        "trusted": distrust is None,
        "distrust": distrust,
        "point_count": int(fits.read_count[k]),
        "well_count": int(fits.well_count[k]),
        "degrees_of_freedom": int(fits.degrees[k]),
        "weighted_residual_sum": float(fits.objective[k]),
        "read_sd_um": float(fits.noise.read_sd[k]),
        "enzyme_cv": float(fits.noise.cv[0, k]) if fits.scatter_known[k] else np.nan,
        "substrate_cv": float(fits.noise.cv[1, k]) if fits.scatter_known[k] else np.nan,
        "highest_conversion": float(fits.conversion[k]),
        "residual_correlation_z": float(fits.correlation_z[k]),
    }


def _constant_rows(fits: SeriesFits, k: int, number: int, constants: Constants) -> list[dict[str, object]]:
    value = np.exp(fits.log_constants[:, k])
    error = value * np.sqrt(np.diagonal(fits.log_covariance[k]))
    return [
        {
            "series": number,
            "law": LAW,
            "constant": name,
            "value": float(value[i]),
            "standard_error": float(error[i]),
            "low": float(fits.low[i, k]),
            "high": float(fits.high[i, k]),
            "unit": UNITS[name],
        }
        for i, name in enumerate(constants.names)
    ]


def _distrust(fits: SeriesFits, k: int, constants: Constants) -> str | None:
    """Why the uncertainty of a fit that came to rest cannot be trusted, or None."""
    if not fits.full_rank[k]:
        return "the curves do not tell the constants apart"
    at_limit = [name for i, name in enumerate(constants.names) if fits.at_limit[i, k]]
    if at_limit:
        return ", ".join(f"{name} lies at its limit" for name in at_limit)
    if not fits.scatter_known[k]:
        return "too few wells to tell how unevenly enzyme and substrate were dispensed"
    ends = ((fits.low, "below"), (fits.high, "above"))
    is_open = [
        f"{name} is open {side}"
        for i, name in enumerate(constants.names)
        for values, side in ends
        if not np.isfinite(values[i, k])
    ]
    if is_open:
        return ", ".join(is_open)
    if fits.correlation_z[k] > _CORRELATED:
        return "the residuals follow each other: the law does not describe these curves"
    if fits.scatter_at_limit[k]:
        return "only wells dispensed far more unevenly than any are would fit: the law does not describe them"
    return None


def _result(parts: Sequence[_Part], refused: Mapping[int, Refusal]) -> ProgressResult:
    covariance: dict[int, Floats] = {}
    for part in parts:
        covariance |= part.covariance
    influence = [part.influence for part in parts if len(part.influence)]
    return ProgressResult(
        pd.DataFrame([row for part in parts for row in part.fits], columns=list(FIT_COLUMNS)),
        pd.DataFrame([row for part in parts for row in part.constants], columns=list(CONSTANT_COLUMNS)),
        pd.DataFrame(
            [
                {"series": number, "kind": str(refusal.kind), "reason": refusal.reason}
                for number, refusal in sorted(refused.items())
            ],
            columns=list(REFUSAL_COLUMNS),
        ),
        covariance,
        pd.concat(influence, ignore_index=True)
        if influence
        else pd.DataFrame({name: np.empty(0) for name in INFLUENCE_COLUMNS}),
    )
