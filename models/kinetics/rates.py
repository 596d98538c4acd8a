"""From progress curves to initial rates: window, rate, standard error, mean substrate, shape.

Plate reads are measured one at a time, so that a rate depends on its own plate read alone. Gates and
standings are no business of this module: it reports what it measured.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from models.kinetics.blanks import MatchedBlanks, match_blanks
from models.kinetics.curvature import Curves
from models.kinetics.curves import CurveBatch
from models.kinetics.prediction import SeriesCourse, no_course, predict_courses
from models.kinetics.settling import Settling
from models.kinetics.window_choice import Choice, choose_windows
from models.kinetics.windows import WindowFits, windows_from
from models.statistics.moderation import moderate_variances
from models.statistics.sums import sum_rows

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

_PLAINLY_DEPLETED = 2.0
"""A well past this many depletion limits within its shortest window does not shape its series' prediction."""


@dataclass(frozen=True)
class RateSettings:
    """How windows are chosen; each but `rounds` is a number, or an array with one value a well.

    Attributes
    ----------
    depletion_limit
        Largest conversion at a window's end [1].
    slope_change_limit
        Largest change of slope over a window that depletion does not explain, over the slope [1].
    slope_change_t_limit
        t value below which such a change is not believed. A clean well is tried on three stretches in three
        rounds: at 4, chance alone passes it less than once in a thousand wells.
    shortest_points
        Fewest usable reads of a window.
    rounds
        Rounds of predicting conversion from the series' fit and choosing windows from it.
    """

    depletion_limit: float | Floats = 0.10
    slope_change_limit: float | Floats = 0.10
    slope_change_t_limit: float | Floats = 4.0
    shortest_points: int | Integers = 5
    rounds: int = 2


@dataclass(frozen=True)
class _Measured:
    """Rates of a plate read over the windows chosen, shape (wells,) each.

    `transients` and their errors are v0, vs and k, shape (3, wells); NaN where they are not told.
    """

    line: WindowFits
    rate: Floats
    standard_error: Floats
    blank_rate: Floats
    blank_error: Floats
    mean_substrate_um: Floats
    conversion: Floats
    shortest_conversion: Floats
    read_variance: Floats
    basis: NDArray[np.object_]
    transients: Floats
    transient_errors: Floats


def measure_rates(
    batch: CurveBatch, series_laws: Sequence[tuple[str, ...]], settings: RateSettings | None = None
) -> pd.DataFrame:
    """Measure the initial rate of every well.

    The window runs from the end of any lag over the longest stretch in which the predicted conversion stays
    within the depletion limit and a straight line holds. The rate is the line's slope, paired with the mean
    substrate over its window (Lee and Wilson 1971, doi:10.1016/0005-2744(71)90144-6).

    Where a lag or a burst was found and the reads before the conversion limit tell its exponential (see
    `models.kinetics.transients`), the rate is the exponential's instead, depletion taken out of the curve
    first: the steady rate after a lag that surely settles, paired with the mean substrate over the window
    after it; the initial rate of a burst, paired with the substrate at the first read. `rate_basis` says
    which.

    Parameters
    ----------
    batch
        Progress curves of W wells of any number of plate reads.
    series_laws
        Names of the candidate rate laws of each series, by series number.
    settings
        How windows are chosen; None for the defaults.

    Returns
    -------
    DataFrame
        W rows in the batch's order with the measured columns of the table `rates`, and
        `depletion_slope_change`: the change of slope over the window that depletion explains. `slope_change`
        and `early_slope_change` are what is left beyond it, so that a window of 10 % conversion at low
        substrate is not called curved for the 9 % that its slope must fall.

    Raises
    ------
    UnknownName
        If a series names a law that is not in the registry.
    """
    settings = settings or RateSettings()
    frames = []
    for plate in np.unique(batch.plate):
        wells = np.flatnonzero(batch.plate == plate)
        frame = _measure_plate(batch.select(wells), series_laws, _of_wells(settings, wells, batch.well_count))
        frames.append(frame.set_index(wells))
    if not frames:
        return _measure_plate(batch, series_laws, _of_wells(settings, np.empty(0, dtype=np.intp), 0))
    return pd.concat(frames).sort_index()


def _of_wells(settings: RateSettings, wells: Integers, count: int) -> RateSettings:
    def part(value: float | Floats | int | Integers) -> Floats:
        return np.broadcast_to(np.asarray(value, dtype=np.float64), (count,))[wells]

    return RateSettings(
        part(settings.depletion_limit),
        part(settings.slope_change_limit),
        part(settings.slope_change_t_limit),
        part(settings.shortest_points).astype(np.intp),
        settings.rounds,
    )


def _measure_plate(
    batch: CurveBatch, series_laws: Sequence[tuple[str, ...]], settings: RateSettings
) -> pd.DataFrame:
    time_s, product_um = np.ascontiguousarray(batch.time_s.T), np.ascontiguousarray(batch.product_um.T)
    plain = batch.is_blank | batch.is_enzyme_blank
    blanks = match_blanks(time_s, product_um, batch.is_blank, ~plain, batch.substrate_um)
    curves = Curves(
        time_s=time_s,
        net_um=product_um - blanks.value_um,
        substrate_um=batch.substrate_um,
        consumable_um=np.where(plain, np.nan, batch.consumable_um),
        zero_is_blank=batch.product_zero_is_blank & (blanks.source != "none"),
        plain=plain,
        depletion_limit=np.asarray(settings.depletion_limit),
        slope_change_limit=np.asarray(settings.slope_change_limit),
        slope_change_t_limit=np.asarray(settings.slope_change_t_limit),
        shortest_points=np.asarray(settings.shortest_points),
    )
    course = no_course(batch.well_count)
    for turn in range(settings.rounds + 1):
        choice = choose_windows(curves, course)
        measured = _measure(curves, blanks, choice)
        if turn < settings.rounds:
            course = _predict(batch, series_laws, curves, choice, measured)
    # Only now: consumption is predicted from lines, as the first rate of a burst does not last.
    return _rows(curves, blanks, choice, _with_transients(measured, curves, blanks, choice))


def _predict(
    batch: CurveBatch,
    series_laws: Sequence[tuple[str, ...]],
    curves: Curves,
    choice: Choice,
    measured: _Measured,
) -> SeriesCourse:
    with np.errstate(invalid="ignore"):
        depleted = measured.shortest_conversion > _PLAINLY_DEPLETED * curves.depletion_limit
    return predict_courses(
        np.where(curves.plain, -1, batch.series),
        series_laws,
        choice.readable & ~depleted,
        measured.mean_substrate_um,
        batch.substrate_um,
        measured.rate,
        measured.standard_error,
    )


def _measure(curves: Curves, blanks: MatchedBlanks, choice: Choice) -> _Measured:
    fits = windows_from(curves.time_s, curves.net_um, choice.start)
    line = fits.pick(choice.end)
    settling = choice.settling
    usable = settling.fits.told & (settling.fits.surely_settles | ~choice.lagging[settling.wells])
    # The parabola's residuals: what depletion bends is not noise. Where a transient is used, its own.
    own_variance, degrees = line.parabola_variance.copy(), np.maximum(line.count - 3.0, 0.0)
    own_variance[settling.wells[usable]] = settling.fits.read_variance[usable]
    degrees[settling.wells[usable]] = settling.fits.degrees_of_freedom[usable]
    variance = moderate_variances(np.where(choice.readable, own_variance, np.nan), degrees).variance
    reads = np.arange(curves.time_s.shape[0])[:, None]
    used = np.isfinite(curves.net_um) & (reads >= choice.start) & (reads <= choice.end)
    blank_rate, blank_error = blanks.slope(curves.time_s, used)
    with np.errstate(invalid="ignore"):
        standard_error = np.sqrt(
            variance * line.slope_factor + np.where(np.isfinite(blank_error), blank_error, 0.0) ** 2
        )
    shortest_end = curves.time_s[choice.shortest_end, np.arange(choice.start.size)]
    return _Measured(
        line=line,
        rate=line.slope,
        standard_error=standard_error,
        blank_rate=blank_rate,
        blank_error=blank_error,
        mean_substrate_um=np.where(curves.plain, np.nan, curves.substrate_um - (line.mean - choice.zero_um)),
        conversion=(line.at(line.end_s) - choice.zero_um) / curves.consumable_um,
        shortest_conversion=(line.at(shortest_end) - choice.zero_um) / curves.consumable_um,
        read_variance=variance,
        basis=np.full(line.slope.size, "line", dtype=object),
        transients=np.full((3, line.slope.size), np.nan),
        transient_errors=np.full((3, line.slope.size), np.nan),
    )


def _with_transients(straight: _Measured, curves: Curves, blanks: MatchedBlanks, choice: Choice) -> _Measured:
    """The steady rate after a lag and the initial rate of a burst, where the transient tells them."""
    settling = choice.settling
    if settling.wells.size == 0:
        return straight
    wells, fits, lagging = settling.wells, settling.fits, choice.lagging[settling.wells]
    # What is consumed where the rate is paired with substrate: over a lag's window, at a burst's first read.
    consumed = np.where(
        lagging, curves.substrate_um[wells] - straight.mean_substrate_um[wells], settling.first_um
    )
    scale = settling.scale_at(consumed) * np.array([[1.0], [1.0], [0.0]]) + np.array([[0.0], [0.0], [1.0]])
    values = np.stack([fits.v0_um_per_s, fits.vs_um_per_s, fits.k_per_s]) * scale
    factor = np.stack([fits.unit_covariance[k, k] for k in range(3)])
    with np.errstate(invalid="ignore"):
        errors = scale * np.sqrt(straight.read_variance[wells] * factor + _blank_variance(blanks, settling))
    told = fits.told & np.isfinite(errors).all(axis=0) & choice.readable[wells]
    # Surely: among lags too long for the reads, those whose noise makes k look large enough would come out
    # 28 % low with small errors.
    steady = told & fits.surely_settles & (values[1] > 0) & lagging
    # That a burst settles within all its reads made it one; v0 lies at the reads, so that those before the
    # conversion limit need not settle as well: simulated, that leaves 93 % coverage where lines have none.
    initial = told & (values[0] > 0) & ~lagging
    from_blank = curves.zero_is_blank[wells]
    at_first = curves.substrate_um[wells] - np.where(from_blank, settling.first_um, 0.0)

    def replaced(old: Floats, *changes: tuple[Flags, Floats]) -> Floats:
        new = old.copy()
        for where, value in changes:
            new[wells[where]] = value[where]
        return new

    basis = straight.basis.copy()
    basis[wells[steady]], basis[wells[initial]] = "steady_state", "initial"
    transients, transient_errors = straight.transients.copy(), straight.transient_errors.copy()
    transients[:, wells] = np.where(told, values, np.nan)
    transient_errors[:, wells] = np.where(told, errors, np.nan)
    return replace(
        straight,
        rate=replaced(straight.rate, (steady, values[1]), (initial, values[0])),
        standard_error=replaced(straight.standard_error, (steady, errors[1]), (initial, errors[0])),
        mean_substrate_um=replaced(straight.mean_substrate_um, (initial, at_first)),
        basis=basis,
        transients=transients,
        transient_errors=transient_errors,
    )


def _blank_variance(blanks: MatchedBlanks, settling: Settling) -> Floats:
    """Variance of v0, vs and k from the blank curves that were subtracted, shape (3, wells).

    Blanks whose slopes differ shift both rates alike and leave k as it is.
    """
    variance = np.zeros((3, settling.wells.size))
    for number, curve in enumerate(blanks.curves):
        mine = np.flatnonzero(blanks.curve[settling.wells] == number)
        if mine.size:
            influence = np.moveaxis(settling.influence[:, :, mine], 1, 0)
            share = sum(sum_rows(influence * column[:, None, None]) ** 2 for column in curve.basis.T)
            variance[:, mine] = curve.read_variance * share + curve.slope_excess * np.array(
                [[1.0], [1.0], [0.0]]
            )
    return variance


def _rows(curves: Curves, blanks: MatchedBlanks, choice: Choice, measured: _Measured) -> pd.DataFrame:
    known = choice.readable
    line = measured.line
    reads = np.arange(curves.time_s.shape[0])[:, None]
    used = np.isfinite(curves.net_um) & (reads >= choice.start) & (reads <= choice.end)

    def where_known(values: Floats) -> Floats:
        return np.where(known, values, np.nan)

    raw = measured.rate + np.where(np.isfinite(measured.blank_rate), measured.blank_rate, 0.0)
    substrate_free = ~np.isfinite(curves.consumable_um) & ~curves.plain
    mean_substrate = np.where(substrate_free, curves.substrate_um, measured.mean_substrate_um)
    first, last = np.argmax(used, axis=0), used.shape[0] - 1 - np.argmax(used[::-1], axis=0)
    return pd.DataFrame(
        {
            "v0_um_per_s": where_known(measured.rate),
            "v0_se_um_per_s": where_known(measured.standard_error),
            "raw_rate_um_per_s": where_known(raw),
            "blank_rate_um_per_s": where_known(measured.blank_rate),
            "blank_rate_se_um_per_s": where_known(measured.blank_error),
            "blank_source": blanks.source,
            "mean_substrate_um": where_known(mean_substrate),
            "window_first_read": pd.array(np.where(known, first + 1, 0), dtype="Int64"),
            "window_last_read": pd.array(np.where(known, last + 1, 0), dtype="Int64"),
            "window_start_s": where_known(line.start_s),
            "window_end_s": where_known(line.end_s),
            "window_point_count": np.where(known, line.count, choice.usable_count).astype(np.int64),
            "conversion": where_known(measured.conversion),
            "shortest_conversion": where_known(measured.shortest_conversion),
            "slope_change": where_known(choice.slope_change),
            "slope_change_t": where_known(choice.slope_change_t),
            "depletion_slope_change": where_known(choice.depletion_slope_change),
            "early_slope_change": where_known(choice.early_slope_change),
            "early_slope_change_t": where_known(choice.early_slope_change_t),
            "lag_s": where_known(choice.lag_s),
            "shape": choice.shape(measured.shortest_conversion),
            "rate_basis": pd.Series(measured.basis, dtype=object).where(known),
            "transient_v0_um_per_s": measured.transients[0],
            "transient_v0_se_um_per_s": measured.transient_errors[0],
            "transient_vs_um_per_s": measured.transients[1],
            "transient_vs_se_um_per_s": measured.transient_errors[1],
            "transient_k_per_s": measured.transients[2],
            "transient_k_se_per_s": measured.transient_errors[2],
        }
    ).assign(
        window_first_read=lambda frame: frame["window_first_read"].where(known),
        window_last_read=lambda frame: frame["window_last_read"].where(known),
    )
