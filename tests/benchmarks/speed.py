"""Batched arithmetic against loops, side by side in one run: python -m tests.benchmarks.speed.

Loops are timed on a sample and scaled to the whole; ratios hold for one machine under one load.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from lmfit import Parameters, conf_interval
from lmfit.minimizer import Minimizer, MinimizerResult
from scipy.optimize import curve_fit

from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import HILL, MICHAELIS_MENTEN, SUBSTRATE_INHIBITION, RateLaw, at_levels
from models.kinetics.windows import all_windows

SERIES, LOOPED, LOOPED_SLOWLY, LOOPED_INTERVALS = 10_000, 1_000, 200, 30
WELLS, READS, LOOPED_WINDOWS = 384, 60, 20_000
WANTED = 50.0
SAME_OPTIMUM, SAME_SLOPE, SAME_END = 1e-6, 1e-9, 1e-3


@dataclass(frozen=True)
class Race:
    """One comparison: seconds for the whole work, and the largest relative difference of results."""

    name: str
    batched_s: float
    loop_s: float
    difference: float
    allowed: float
    wanted: float

    @property
    def ratio(self) -> float:
        """How many times as fast the batched work is."""
        return self.loop_s / self.batched_s

    @property
    def won(self) -> bool:
        """Whether it is as fast as wanted and gives the same results."""
        return self.ratio >= self.wanted and self.difference <= self.allowed


def _seconds(work: Callable[[], object], repeats: int) -> float:
    """Least time of a few runs, the one that other work on the machine disturbed least."""
    times = []
    for _ in range(repeats):
        begun = time.perf_counter()
        work()
        times.append(time.perf_counter() - begun)
    return min(times)


Equation = Callable[..., np.ndarray]


@dataclass(frozen=True)
class Work:
    """One law's series, and its equation as a loop would have it.

    Attributes
    ----------
    order
        Hill coefficient that the rates are made with.
    k_si
        Dissociation constant of the substrate that inhibits, over the constant of half saturation.
    """

    law: RateLaw
    equation: Equation
    start: Callable[[np.ndarray, np.ndarray], list[float]]
    order: float = 1.0
    k_si: float = np.inf
    wanted: float = 30.0

    def rates(self) -> tuple[np.ndarray, np.ndarray]:
        """Levels and rates with 3 % error, shape (levels, series)."""
        generator = np.random.default_rng(1)
        levels = np.repeat(np.geomspace(10.0, 960.0, 8)[:, None], SERIES, axis=1)
        k = 80.0 * np.exp(generator.normal(0.0, 0.5, SERIES))
        vmax = np.exp(generator.normal(0.0, 0.3, SERIES))
        rate = vmax / (1.0 + (k / levels) ** self.order + levels / (self.k_si * 80.0))
        return levels, rate * (1.0 + 0.03 * generator.standard_normal(levels.shape))


def _hill(s: np.ndarray, vmax: float, k: float, n: float) -> np.ndarray:
    # On its way the loops' search may try a negative K, which has no power, or an n too large for one.
    with np.errstate(over="ignore"):
        return vmax / (1.0 + (np.abs(k) / s) ** n)


WORKS = (
    Work(
        MICHAELIS_MENTEN,
        lambda s, vmax, km: vmax * s / (km + s),
        lambda s, v: [v.max(), np.median(s)],
        wanted=100.0,
    ),
    Work(HILL, _hill, lambda s, v: [v.max(), np.median(s), 1.0], order=1.6),
    Work(
        SUBSTRATE_INHIBITION,
        lambda s, vmax, km, k_si: vmax * s / (km + s + s * s / k_si),
        lambda s, v: [1.5 * v.max(), np.median(s), s.max()],
        k_si=4.0,
    ),
)


def race_curve_fit(work: Work) -> Race:
    """Fits of one law, with covariance, against scipy's curve_fit, both to the same optimum."""
    levels, rates = work.rates()
    conditions = at_levels(levels)
    fit = fit_law(work.law, conditions, rates)
    batched = _seconds(lambda: fit_law(work.law, conditions, rates), 5)
    found = []

    def loop() -> None:
        found.clear()
        for series in range(LOOPED):
            s, v = levels[:, series], rates[:, series]
            optimum, _ = curve_fit(
                work.equation, s, v, p0=work.start(s, v), ftol=1e-14, xtol=1e-14, gtol=1e-14, maxfev=9000
            )
            found.append(optimum)

    looped = _seconds(loop, 2) * SERIES / LOOPED
    difference = _difference(np.array(found).T, fit.constants[:, :LOOPED])
    return Race(f"{work.law.title}, scipy curve_fit", batched, looped, difference, SAME_OPTIMUM, work.wanted)


def _difference(theirs: np.ndarray, ours: np.ndarray) -> float:
    """Largest relative difference among the series whose constants the data hold: an optimum at infinity has
    no value to agree on."""
    held = np.all(ours < 3.0 * 960.0, axis=0)
    assert held.mean() > 0.9
    return float(np.max(np.abs(np.abs(theirs[:, held]) / ours[:, held] - 1.0)))


def _lmfit(work: Work, s: np.ndarray, v: np.ndarray) -> tuple[Minimizer, MinimizerResult]:
    parameters = Parameters()
    for constant, start in zip(work.law.constants, work.start(s, v), strict=True):
        parameters.add(constant.name, value=start)

    def residual(current: Parameters) -> np.ndarray:
        return work.equation(s, *(current[constant.name].value for constant in work.law.constants)) - v

    search = Minimizer(residual, parameters)
    return search, search.minimize(method="leastsq", ftol=1e-14, xtol=1e-14, gtol=1e-14, epsfcn=1e-15)


def race_lmfit(work: Work) -> Race:
    """Fits of one law, with covariance, against lmfit, both to the same optimum."""
    levels, rates = work.rates()
    conditions = at_levels(levels)
    fit = fit_law(work.law, conditions, rates)
    batched = _seconds(lambda: fit_law(work.law, conditions, rates), 5)
    found = []

    def loop() -> None:
        found.clear()
        for series in range(LOOPED_SLOWLY):
            _, result = _lmfit(work, levels[:, series], rates[:, series])
            found.append([result.params[constant.name].value for constant in work.law.constants])

    looped = _seconds(loop, 1) * SERIES / LOOPED_SLOWLY
    difference = _difference(np.array(found).T, fit.constants[:, :LOOPED_SLOWLY])
    return Race(f"{work.law.title}, lmfit", batched, looped, difference, SAME_OPTIMUM, work.wanted)


def race_intervals(work: Work) -> Race:
    """Profile intervals of all constants against lmfit's conf_interval at 95 %."""
    levels, rates = work.rates()
    conditions, weights = at_levels(levels), np.ones_like(rates)
    fit = fit_law(work.law, conditions, rates)
    low, high = profile_intervals(fit, conditions, rates, weights)
    batched = _seconds(lambda: profile_intervals(fit, conditions, rates, weights), 2)
    closed = np.flatnonzero(np.isfinite(low).all(axis=0) & np.isfinite(high).all(axis=0))[:LOOPED_INTERVALS]
    fitted = [_lmfit(work, levels[:, series], rates[:, series]) for series in closed]
    found = []

    def loop() -> None:
        for search, result in fitted:
            ends = conf_interval(search, result, sigmas=[0.95])
            found.append([[ends[c.name][k][1] for c in work.law.constants] for k in (0, 2)])

    looped = _seconds(loop, 1) * SERIES / LOOPED_INTERVALS
    theirs = np.array(found)
    ours = np.stack([low[:, closed].T, high[:, closed].T], axis=1)
    difference = float(np.max(np.abs(np.sort(np.abs(theirs), axis=1) / ours - 1.0)))
    return Race(f"{work.law.title}, lmfit conf_interval", batched, looped, difference, SAME_END, 100.0)


def race_windows() -> Race:
    """Slopes of all windows of a plate against numpy's polyfit of degree 1 over the same windows."""
    generator = np.random.default_rng(2)
    time_s = np.repeat(np.linspace(0.0, 590.0, READS)[:, None], WELLS, axis=1)
    values = 0.05 * time_s * (1.0 - 1e-4 * time_s) + generator.normal(0.0, 0.2, time_s.shape)
    windows = all_windows(time_s, values)
    batched = _seconds(lambda: all_windows(time_s, values), 3)
    picked = generator.choice(windows.slope.size, LOOPED_WINDOWS, replace=False)
    rows, wells = np.unravel_index(picked, windows.slope.shape)
    cuts = [(slice(windows.first[r], windows.stop[r]), w) for r, w in zip(rows, wells, strict=True)]
    found = np.empty(LOOPED_WINDOWS)

    def loop() -> None:
        for place, (cut, well) in enumerate(cuts):
            found[place] = np.polyfit(time_s[cut, well], values[cut, well], 1)[0]

    looped = _seconds(loop, 1) * windows.slope.size / LOOPED_WINDOWS
    own = windows.slope[rows, wells]
    difference = np.max(np.abs(found - own)) / np.median(np.abs(own))
    return Race(f"all {windows.slope.size} windows", batched, looped, float(difference), SAME_SLOPE, WANTED)


def main() -> int:
    """Print the table; 0 where every ratio and every agreement is reached."""
    races = [
        *(race_curve_fit(work) for work in WORKS),
        *(race_lmfit(work) for work in WORKS),
        *(race_intervals(work) for work in WORKS[:2]),
        race_windows(),
    ]
    print(f"{SERIES} series of 8 rates; loops timed on a part and scaled")
    print(f"{'work':<40}{'batched s':>11}{'loop s':>10}{'ratio':>8}{'wanted':>8}{'difference':>12}")
    for race in races:
        mark = "" if race.won else "  <- missed"
        print(
            f"{race.name:<40}{race.batched_s:>11.3f}{race.loop_s:>10.2f}{race.ratio:>8.0f}{race.wanted:>8.0f}"
            f"{race.difference:>12.1e}{mark}"
        )
    return 0 if all(race.won for race in races) else 1


if __name__ == "__main__":
    sys.exit(main())
