"""Batched arithmetic against loops, side by side in one run: python -m tests.benchmarks.speed.

Loops are timed on a sample and scaled to the whole; ratios hold for one machine under one load.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.optimize import curve_fit

from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import HILL, MICHAELIS_MENTEN, RateLaw, at_levels
from models.kinetics.windows import all_windows

SERIES, LOOPED = 10_000, 1_000
WELLS, READS, LOOPED_WINDOWS = 384, 60, 20_000
WANTED = 50.0
SAME_OPTIMUM, SAME_SLOPE = 1e-6, 1e-9


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


def _rates(order: float) -> tuple[np.ndarray, np.ndarray]:
    generator = np.random.default_rng(1)
    levels = np.repeat(np.geomspace(10.0, 960.0, 8)[:, None], SERIES, axis=1)
    k = 80.0 * np.exp(generator.normal(0.0, 0.5, SERIES))
    vmax = np.exp(generator.normal(0.0, 0.3, SERIES))
    rate = vmax * levels**order / (k**order + levels**order)
    return levels, rate * (1.0 + 0.03 * generator.standard_normal(levels.shape))


def _hill(s: np.ndarray, vmax: float, k: float, n: float) -> np.ndarray:
    # On its way the loop's search may try a negative K, which has no power.
    with np.errstate(invalid="ignore"):
        return vmax / (1.0 + (k / s) ** n)


def race_fits(law: RateLaw, order: float, equation: Callable[..., np.ndarray], wanted: float) -> Race:
    """Fits of one law, with covariance, against scipy's curve_fit, both to the same optimum."""
    levels, rates = _rates(order)
    conditions = at_levels(levels)
    fit = fit_law(law, conditions, rates)
    batched = _seconds(lambda: fit_law(law, conditions, rates), 5)
    found = []

    def loop() -> None:
        found.clear()
        for series in range(LOOPED):
            start = [rates[:, series].max(), np.median(levels[:, series]), 1.0][: law.constant_count]
            optimum, _ = curve_fit(
                equation, levels[:, series], rates[:, series], p0=start, ftol=1e-14, xtol=1e-14, gtol=1e-14,
                maxfev=5000,
            )  # fmt: skip
            found.append(optimum)

    looped = _seconds(loop, 2) * SERIES / LOOPED
    difference = np.max(np.abs(np.array(found).T / fit.constants[:, :LOOPED] - 1.0))
    return Race(
        f"{law.title} fits, {SERIES} series", batched, looped, float(difference), SAME_OPTIMUM, wanted
    )


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
        race_fits(MICHAELIS_MENTEN, 1.0, lambda s, vmax, km: vmax * s / (km + s), WANTED),
        race_fits(HILL, 1.6, _hill, 30.0),
        race_windows(),
    ]
    print(f"{'work':<36}{'batched s':>11}{'loop s':>10}{'ratio':>8}{'wanted':>8}{'difference':>12}")
    for race in races:
        mark = "" if race.won else "  <- missed"
        print(
            f"{race.name:<36}{race.batched_s:>11.3f}{race.loop_s:>10.2f}{race.ratio:>8.0f}{race.wanted:>8.0f}"
            f"{race.difference:>12.1e}{mark}"
        )
    levels, rates = _rates(1.0)
    fit = fit_law(MICHAELIS_MENTEN, at_levels(levels), rates)
    seconds = _seconds(lambda: profile_intervals(fit, at_levels(levels), rates, np.ones_like(rates)), 2)
    print(f"profile intervals of both constants, {SERIES} series: {seconds:.2f} s")
    return 0 if all(race.won for race in races) else 1


if __name__ == "__main__":
    sys.exit(main())
