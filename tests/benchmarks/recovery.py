"""Recovery of Km from simulated plates, beside the usual way: python -m tests.benchmarks.recovery.

Plates and seed may follow as two numbers.

Conditions: Km 80 umol/L, 8 levels from 0.125 to 12 Km in triplicate, 2 % for each dispensing step, 1.5 mAU a
read. The usual way: nominal substrate, each well's own longest window up to 10 % conversion, equal weights.
"""

from __future__ import annotations

import sys
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from models.kinetics.fitting import fit_rates
from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import MICHAELIS_MENTEN, at_levels
from models.kinetics.rates import measure_rates
from models.kinetics.windows import windows_from
from models.simulation import TRIPLICATE_NOISE, TRIPLICATE_TRUTH, simulate_plate, triplicate_design
from tests.models.kinetics.kinetic_plates import curve_batch

PLATES, SEED = 300, 20260101
PLATES_AT_ONCE = 50
TRUE = {"km": TRIPLICATE_TRUTH.k_um, "vmax": TRIPLICATE_TRUTH.kcat_per_s * 1e-3}


@dataclass(frozen=True)
class Recovery:
    """How well one constant is recovered over many plates.

    Attributes
    ----------
    bias, bias_error
        Mean estimate over the truth less 1, and the standard error of that mean [1].
    scatter
        Standard deviation of the estimates over the truth [1].
    coverage, coverage_error
        Share of 95 % intervals that hold the truth, and the standard error of a share of 0.95 [1].
    """

    way: str
    constant: str
    plates: int
    bias: float
    bias_error: float
    scatter: float
    coverage: float
    coverage_error: float


def recovery(plates: int = PLATES, seed: int = SEED) -> list[Recovery]:
    """Simulate plates, measure and fit them here and in the usual way."""
    rows = [
        _plates(range(first, min(first + PLATES_AT_ONCE, plates)), seed)
        for first in range(0, plates, PLATES_AT_ONCE)
    ]
    here = fit_rates(
        pd.concat([mine for mine, _ in rows], ignore_index=True), [("michaelis_menten",)] * plates
    )
    usual = pd.concat([theirs for _, theirs in rows], ignore_index=True)
    return [
        *_judged("halfsat", here.constants, plates),
        *_judged("usual way", _usual_fits(usual, plates), plates),
    ]


def _plates(numbers: Sequence[int], seed: int) -> tuple[pd.DataFrame, pd.DataFrame]:
    design = triplicate_design()
    simulated = [
        simulate_plate(
            design, {"lot": TRIPLICATE_TRUTH}, TRIPLICATE_NOISE, [], np.random.default_rng([seed, number])
        )
        for number in numbers
    ]
    batch = curve_batch(simulated, design)
    rates = measure_rates(batch, [("michaelis_menten",)] * len(simulated))
    frame = pd.DataFrame(
        {
            "series": batch.series + numbers[0],
            "plate": batch.plate + numbers[0],
            "substrate_um": rates["mean_substrate_um"],
            "nominal_substrate_um": batch.substrate_um,
            "v_um_per_s": rates["v0_um_per_s"],
            "v_se_um_per_s": rates["v0_se_um_per_s"],
        }
    )
    # Every well's mean blank read by read, then the longest own window whose line ends below 10 % conversion.
    wells_a_plate = batch.well_count // len(simulated)
    net = batch.product_um.copy()
    for plate in range(len(simulated)):
        mine = slice(plate * wells_a_plate, (plate + 1) * wells_a_plate)
        for level in np.unique(batch.substrate_um[mine]):
            at_level = np.flatnonzero((batch.plate == plate) & (batch.substrate_um == level))
            net[at_level] -= batch.product_um[at_level[batch.is_blank[at_level]]].mean(axis=0)
    fits = windows_from(batch.time_s.T, net.T, np.zeros(batch.well_count, dtype=int))
    within = (fits.slope * (fits.end_s - fits.start_s) <= 0.10 * batch.substrate_um) & (fits.count >= 5)
    end = within.shape[0] - 1 - np.argmax(within[::-1], axis=0)
    usual = pd.DataFrame(
        {"series": frame["series"], "substrate_um": batch.substrate_um, "v_um_per_s": fits.pick(end).slope}
    )
    return frame[~batch.is_blank], usual[~batch.is_blank]


def _usual_fits(rows: pd.DataFrame, plates: int) -> pd.DataFrame:
    substrate = rows["substrate_um"].to_numpy().reshape(plates, -1).T
    rate = rows["v_um_per_s"].to_numpy().reshape(plates, -1).T
    fit = fit_law(MICHAELIS_MENTEN, at_levels(substrate), rate)
    low, high = profile_intervals(fit, at_levels(substrate), rate, np.ones_like(rate))
    return pd.concat(
        [
            pd.DataFrame(
                {"constant": constant.name, "value": fit.constants[k], "low": low[k], "high": high[k]}
            )
            for k, constant in enumerate(MICHAELIS_MENTEN.constants)
        ]
    )


def _judged(way: str, constants: pd.DataFrame, plates: int) -> list[Recovery]:
    judged = []
    for constant, true in TRUE.items():
        mine = constants[constants["constant"] == constant]
        relative = mine["value"].to_numpy() / true
        # An open end holds everything on its side.
        covered = ~((mine["low"] > true) | (mine["high"] < true))
        judged.append(
            Recovery(
                way,
                constant,
                plates,
                float(relative.mean() - 1.0),
                float(relative.std(ddof=1) / np.sqrt(plates)),
                float(relative.std(ddof=1)),
                float(covered.sum() / plates),
                float(np.sqrt(0.95 * 0.05 / plates)),
            )
        )
    return judged


def main(words: Sequence[str]) -> int:
    """Print the table; 0 where bias of Km is below 0.5 % and coverage between 93 and 97 %."""
    plates = int(words[0]) if words else PLATES
    seed = int(words[1]) if len(words) > 1 else SEED
    rows = recovery(plates, seed)
    print(f"{plates} simulated plates, seed {seed}; true Km 80 umol/L, Vmax 0.05 umol/L/s")
    print(f"{'way':<12}{'constant':<10}{'bias %':>16}{'scatter %':>12}{'coverage %':>18}")
    for row in rows:
        bias = f"{100 * row.bias:.2f} ± {100 * row.bias_error:.2f}"
        coverage = f"{100 * row.coverage:.1f} ± {100 * row.coverage_error:.1f}"
        print(f"{row.way:<12}{row.constant:<10}{bias:>16}{100 * row.scatter:>12.2f}{coverage:>18}")
    km = rows[0]
    return 0 if abs(km.bias) < 0.005 and 0.93 <= km.coverage <= 0.97 else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
