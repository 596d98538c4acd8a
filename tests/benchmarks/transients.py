"""Rates of curves that begin with a lag or a burst, beside a line: python -m tests.benchmarks.transients.

Plates a row (24 wells each) and seed may follow as two numbers. Conditions: Km 80 umol/L, 8 levels from
0.125 to 12 Km in triplicate, 0.5 mAU a read, 61 reads in 600 s, no error of dispensing. The line runs from
the first read to 10 % conversion, or to the end; it is judged at the mean substrate over its reads.
"""

from __future__ import annotations

import sys
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from models.kinetics.rates import measure_rates
from models.kinetics.windows import windows_from
from models.simulation import TRIPLICATE_TRUTH, Noise, simulate_plate, triplicate_design
from models.simulation.faults import Burst, Fault, Lag
from tests.models.kinetics.kinetic_plates import curve_batch

PLATES, SEED = 10, 20260101
NOISE = Noise(signal_sd=0.0005, baseline_sd=0.003)
CONDITIONS: tuple[tuple[str, Fault | None], ...] = (
    ("none", None),
    *((f"lag {tau:.0f} s", Lag(tau)) for tau in (15.0, 40.0, 80.0, 150.0, 250.0)),
    *(
        (f"burst {ratio:.1f}x {tau:.0f} s", Burst(ratio, tau))
        for ratio in (1.5, 3.0)
        for tau in (15.0, 40.0, 80.0, 150.0)
    ),
)


@dataclass(frozen=True)
class TransientRow:
    """What became of the wells of one condition.

    Attributes
    ----------
    wells, found, used
        Wells simulated, those whose lag or burst was found, and those whose rate is the exponential's.
    bias, bias_error, coverage
        Of the rates from the exponential: mean over the truth less 1, that mean's standard error, share of
        intervals of 1.96 standard errors that hold the truth [1]; NaN where there are none.
    fallback_bias
        Bias where the lag or burst was found but its exponential not told, so that a line is used [1].
    line_bias, line_coverage
        The same for the line, over the wells whose rate is the exponential's [1].
    """

    condition: str
    wells: int
    found: int
    used: int
    bias: float
    bias_error: float
    coverage: float
    fallback_bias: float
    line_bias: float
    line_coverage: float


def transient_rows(plates: int = PLATES, seed: int = SEED) -> list[TransientRow]:
    """Simulate, measure and judge every condition."""
    return [_row(name, fault, plates, seed) for name, fault in CONDITIONS]


def _true(substrate_um: pd.Series, fault: Fault | None) -> pd.Series:
    ratio = fault.ratio if isinstance(fault, Burst) else 1.0
    vmax = TRIPLICATE_TRUTH.kcat_per_s * 1e-3
    return ratio * vmax * substrate_um / (TRIPLICATE_TRUTH.k_um + substrate_um)


def _row(name: str, fault: Fault | None, plates: int, seed: int) -> TransientRow:
    design = triplicate_design()
    simulated = [
        simulate_plate(
            design,
            {"lot": TRIPLICATE_TRUTH},
            NOISE,
            [] if fault is None else [fault],
            np.random.default_rng([seed, number]),
        )
        for number in range(plates)
    ]
    batch = curve_batch(simulated, design)
    rates = measure_rates(batch, [("michaelis_menten",)] * plates)
    product = batch.product_um - batch.product_um[:, :1]
    fits = windows_from(batch.time_s.T, batch.product_um.T, np.zeros(batch.well_count, dtype=int))
    within = (product.T / batch.substrate_um <= 0.10) & (fits.count >= 5)
    end = np.where(within.any(axis=0), within.shape[0] - 1 - np.argmax(within[::-1], axis=0), 4)
    line = fits.pick(end)
    rates = rates.assign(
        line=line.slope,
        line_se=line.slope_se,
        line_substrate_um=batch.substrate_um - (line.mean - line.at(line.start_s)),
    )[~batch.is_blank]
    found = rates[rates["shape"].isin(("lag", "burst"))]
    used, fallback = (found[(found["rate_basis"] == "line") == is_line] for is_line in (False, True))
    true, line_true = _true(used["mean_substrate_um"], fault), _true(used["line_substrate_um"], fault)
    relative = used["v0_um_per_s"] / true - 1.0
    return TransientRow(
        name,
        len(rates),
        len(found),
        len(used),
        float(relative.mean()),
        float(relative.sem()),
        _coverage(used["v0_um_per_s"] - true, used["v0_se_um_per_s"]),
        float((fallback["v0_um_per_s"] / _true(fallback["mean_substrate_um"], fault) - 1.0).mean()),
        float((used["line"] / line_true - 1.0).mean()),
        _coverage(used["line"] - line_true, used["line_se"]),
    )


def _coverage(error: pd.Series, standard_error: pd.Series) -> float:
    return float((error.abs() < 1.96 * standard_error).mean()) if len(error) else float("nan")


def main(words: Sequence[str]) -> int:
    """Print the table; 0 where no well without one is given a transient and every condition's bias is within
    5 % or three of its errors, and smaller than the line's."""
    plates = int(words[0]) if words else PLATES
    seed = int(words[1]) if len(words) > 1 else SEED
    rows = transient_rows(plates, seed)
    print(
        f"{rows[0].wells} simulated wells a row, seed {seed}: the exponential's rates; lines where a lag or"
    )
    print("burst was found but is not told by one; lines over the first 10 % in the exponential's wells")
    print(
        f"{'condition':<16}{'found':>7}{'used':>6}{'bias %':>16}{'cover %':>9}{'fallback %':>12}"
        f"{'line bias %':>13}{'line cover %':>14}"
    )
    for row in rows:
        bias = f"{100 * row.bias:.2f} ± {100 * row.bias_error:.2f}"
        print(
            f"{row.condition:<16}{row.found:>7}{row.used:>6}{bias:>16}{100 * row.coverage:>9.1f}"
            f"{100 * row.fallback_bias:>12.1f}{100 * row.line_bias:>13.1f}{100 * row.line_coverage:>14.1f}"
        )
    sound = all(
        abs(row.bias) < max(0.05, 3 * row.bias_error) and abs(row.bias) < abs(row.line_bias)
        for row in rows[1:]
        if row.used
    )
    return 0 if sound and rows[0].found == 0 else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
