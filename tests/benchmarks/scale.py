"""Cost of fitting against the number of series: python -m tests.benchmarks.scale.

Each size runs in a process of its own, so that peak memory is its own. Cost per series must not rise with
the number of series, and what a fit holds beside its data must stay within its chunks.
"""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import time
from collections.abc import Sequence

import numpy as np
import pandas as pd

from models.kinetics.fitting import fit_rates
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import MICHAELIS_MENTEN, at_levels

SIZES = (1_000, 10_000, 100_000)
LEVELS_UM = np.repeat(80.0 * np.geomspace(0.125, 12.0, 8), 3)
SERIES_A_PLATE = 8
MOST_RISE = 1.3
"""Cost per series at the largest size over that at the middle one; the smallest pays for warming up."""


def rates(series: int) -> np.ndarray:
    """Rates with 2 % error, shape (levels, series)."""
    generator = np.random.default_rng([20260104, series])
    km = 80.0 * np.exp(generator.normal(0.0, 0.3, series))
    exact = 0.05 * LEVELS_UM[:, None] / (km + LEVELS_UM[:, None])
    noise: np.ndarray = exact * (1.0 + 0.02 * generator.standard_normal(exact.shape))
    return noise


def as_frame(values: np.ndarray) -> pd.DataFrame:
    """The same rates as a pass has them, eight series a plate."""
    levels, series = values.shape
    number = np.repeat(np.arange(series), levels)
    substrate_um = np.tile(LEVELS_UM, series)
    return pd.DataFrame(
        {
            "series": number,
            "plate": number // SERIES_A_PLATE,
            "substrate_um": substrate_um,
            "nominal_substrate_um": substrate_um,
            "v_um_per_s": values.T.ravel(),
            "v_se_um_per_s": 1e-4,
        }
    )


def measure(work: str, series: int) -> dict[str, float]:
    """Seconds of one fit of so many series, and the memory it took beyond its data [byte]."""
    values = rates(series)
    conditions = at_levels(np.repeat(LEVELS_UM[:, None], series, axis=1))
    frame = as_frame(values) if work == "fit_rates" else None
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    begun = time.perf_counter()
    if frame is None:
        fit_law(MICHAELIS_MENTEN, conditions, values)
    else:
        fit_rates(frame, [("michaelis_menten",)] * series)
    seconds = time.perf_counter() - begun
    more = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before
    return {"seconds": seconds, "more_byte": more * 1024.0}


def measured_apart(work: str, series: int) -> dict[str, float]:
    """The same in a process of its own."""
    command = [sys.executable, "-m", "tests.benchmarks.scale", work, str(series)]
    answer: dict[str, float] = json.loads(subprocess.run(command, capture_output=True, check=True).stdout)
    return answer


def main(words: Sequence[str]) -> int:
    """Print the table; 0 where cost is linear in the number of series."""
    if words:
        print(json.dumps(measure(words[0], int(words[1]))))
        return 0
    print("fit_law: the law alone; fit_rates: weights, intervals, choice and points of a pass beside it")
    print(f"{'work':10} {'series':>8} {'seconds':>9} {'us/series':>10} {'beyond data, byte/series':>26}")
    linear = True
    for work in ("fit_law", "fit_rates"):
        cost = []
        for series in SIZES:
            found = measured_apart(work, series)
            cost.append(found["seconds"] / series)
            more = found["more_byte"] / series
            print(f"{work:10} {series:8d} {found['seconds']:9.2f} {1e6 * cost[-1]:10.1f} {more:26.0f}")
        linear &= cost[-1] <= MOST_RISE * cost[-2]
    print("linear in the number of series" if linear else f"cost per series rises by more than {MOST_RISE}")
    return 0 if linear else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
