"""What the gates catch, hold by mistake, cost and buy: python -m tests.benchmarks.gates [plates].

Plates under the conditions of DESIGN section 6 (Km 80 umol/L, 8 levels from 0.125 to 12 Km in triplicate, 2 %
for each of two dispensing steps, 1.5 mAU a read), one lot and a reference, with the faults of a size that a
practitioner calls clear. A fault is large where it exceeds 5 standard errors of its own estimate: the rest,
in wells with little signal, no rule can see.
"""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from checks.gates import resolve_limits
from flows.proving.bench import ProvingBench, common_bench
from flows.proving.characteristics import BATCH, Clean, Curve, run_tasks, simulate, tasks
from flows.site.configuration import load_configuration
from flows.site.shipped import shipped
from flows.stages.fit import fit_batch
from flows.stages.gate import gate_batch
from flows.stages.rate import rate_batch
from models.records.assay import Assay
from models.simulation import TRIPLICATE_NOISE
from models.simulation.faults import Bubble, Depletion, Fault, PipettingError

PLATES, SEED = 500, 20260105
MOST_HELD, MOST_WELLS_HELD = 0.01, 0.03
LEAST_CAUGHT, LEAST_NAMED = 0.98, 0.95
MARGIN = 0.10
"""A lot is taken for like its reference where its kcat/Km is within 10 % of it."""


def the_bench() -> ProvingBench:
    """The conditions of DESIGN section 6, as an assay."""
    assay = Assay.model_validate(
        {
            "enzyme": "an enzyme",
            "substrate": "S",
            "product": "P",
            "signal": {"kind": "absorbance", "linear_limit": 4.5},
            "absorption": {
                "change_per_molar_per_cm": 6220,
                "source": "Horecker and Kornberg 1948, J. Biol. Chem. 175, 385",
                "path_length_cm": 1.0,
            },
            "laws": ["michaelis_menten"],
            "conditions": {"temperature_c": 25.0},
        }
    )
    profile = next(iter(load_configuration(shipped("config")).profiles.values()))
    return common_bench("benchmark", assay, profile, resolve_limits({}, {}), noise=TRIPLICATE_NOISE)


@dataclass(frozen=True)
class Bought:
    """Faulty plates with and without gates: median relative error of Km, and share of wrong decisions."""

    km_error_with: float
    km_error_without: float
    wrong_with: float
    wrong_without: float
    undecided: float


def bought(bench: ProvingBench, plates: int, seed: int) -> Bought:
    """Strike three wells of the lot on every plate, each otherwise; fit with the gates' word and without."""
    km: dict[str, list[float]] = {"clear": [], "all": []}
    wrong: dict[str, list[bool]] = {"clear": [], "all": []}
    undecided = 0
    k_true = bench.truth["lot"].k_um
    for first in range(0, plates, BATCH):
        numbers = range(first, min(first + BATCH, plates))
        works = [bench.work(n, simulate(bench, (seed, 3, n), _three_faults(bench, seed, n))) for n in numbers]
        fitted = fit_batch(gate_batch(rate_batch(works)))
        estimates, series = fitted.tables["estimates"], fitted.tables["series"].set_index("series_id")
        for work in fitted.plates:
            mine = estimates[(estimates["analysis_id"] == work.analysis_id) & estimates["chosen"]]
            lot = series[(series["analysis_id"] == work.analysis_id) & (series["lot"] == "lot")]
            held = lot["standing"].iloc[0] != "clear"
            undecided += held
            for wells, errors in km.items():
                of = mine[mine["wells"] == wells].set_index(["lot", "constant"])["value"]
                if ("lot", "km") not in of or (wells == "clear" and held):
                    continue
                errors.append(abs(of["lot", "km"] / k_true - 1.0))
                ratio = of["lot", "kcat_per_km"] / of["reference", "kcat_per_km"]
                wrong[wells].append(abs(ratio - 1.0) > MARGIN)
    return Bought(
        float(np.median(km["clear"])),
        float(np.median(km["all"])),
        float(np.mean(wrong["clear"])),
        float(np.mean(wrong["all"])),
        undecided / plates,
    )


def _three_faults(bench: ProvingBench, seed: int, number: int) -> list[Fault]:
    generator = np.random.default_rng([seed, 4, number])
    wells = bench.design.wells
    chosen = generator.choice(
        wells.loc[wells["lot"] == "lot", "well"].to_numpy(dtype=object), 3, replace=False
    )
    return [
        Depletion(20.0, (str(chosen[0]),)),
        Bubble(60.0, 0.1, (str(chosen[1]),)),
        PipettingError(enzyme_factor=0.6, wells=(str(chosen[2]),)),
    ]


def cost_share(bench: ProvingBench, plates: int) -> float:
    """Time of the gates over that of rating and fitting the same plates."""
    works = [bench.work(n, simulate(bench, (SEED, 5, n))) for n in range(plates)]
    # Once before: importing Great Expectations and its first suite are no cost of a plate.
    fit_batch(gate_batch(rate_batch(works[:1])))
    begun = time.perf_counter()
    rated = rate_batch(works)
    rating = time.perf_counter() - begun
    gated = gate_batch(rated)
    gating = time.perf_counter() - begun - rating
    fit_batch(gated)
    rest = time.perf_counter() - begun - rating - gating
    off = {name: {**limits, "on": False} for name, limits in bench.limits.items()}
    without = [_with_limits(bench, off).work(n, simulate(bench, (SEED, 5, n))) for n in range(plates)]
    plain = gate_batch(rate_batch(without))
    begun = time.perf_counter()
    fit_batch(plain)
    fitting = time.perf_counter() - begun
    return (gating + max(rest - fitting, 0.0)) / (rating + fitting)


def _with_limits(bench: ProvingBench, limits: dict[str, dict[str, bool | int | float]]) -> ProvingBench:
    return ProvingBench(**{**vars(bench), "limits": limits})


def fault_rows(curves: Sequence[Curve]) -> pd.DataFrame:
    """A row a fault: how often it was large, caught and rightly named."""
    rows = []
    for curve in curves:
        (point,) = curve.points
        rows.append(
            {
                "fault": curve.trial.name,
                "size": f"{point.size * 100:g} %"
                if curve.trial.unit == "%"
                else f"{point.size:g} {curve.trial.unit}",
                "large": point.large / point.plates,
                "caught": point.large_caught / point.large if point.large else np.nan,
                "named": point.large_named / point.large_caught if point.large_caught else np.nan,
                "caught_of_all": point.caught / point.plates,
            }
        )
    return pd.DataFrame(rows)


def report(clean: Clean, curves: Sequence[Curve], buys: Bought, cost: float) -> tuple[str, bool]:
    """The printed page, and whether every figure is reached."""
    lines = ["Clean plates", f"{'gate':26} {'of':11} {'subjects':>8} {'held':>6} {'share %':>8}"]
    kept = True
    for each in clean.gates:
        share = each.held / each.subjects if each.subjects else 0.0
        kept &= share <= MOST_HELD
        flag = "" if share <= MOST_HELD else "  above 1 %"
        lines.append(
            f"{each.gate:26} {each.subject:11} {each.subjects:8d} {each.held:6d} {share * 100:8.2f}{flag}"
        )
    wells = clean.held_well_count / clean.well_count
    kept &= wells <= MOST_WELLS_HELD
    lines.append(f"all gates together hold {wells * 100:.2f} % of {clean.well_count} wells (3 % allowed)")
    lines += ["", "Faults: large is beyond 5 standard errors; caught and named are shares of those, %"]
    lines.append(f"{'fault':42} {'size':>9} {'large':>6} {'caught':>7} {'named':>6}")
    for row in fault_rows(curves).itertuples(index=False):
        reached = row.caught >= LEAST_CAUGHT and row.named >= LEAST_NAMED
        kept &= reached
        lines.append(
            f"{row.fault:42} {row.size:>9} {row.large * 100:6.1f} {row.caught * 100:7.1f} "
            f"{row.named * 100:6.1f}{'' if reached else '  short'}"
        )
    lines += [
        "",
        "What the gates buy, on plates with three struck wells in 24",
        f"median error of Km: {buys.km_error_with * 100:.1f} % with gates, "
        f"{buys.km_error_without * 100:.1f} % without",
        f"wrong decision on kcat/Km within 10 %: {buys.wrong_with * 100:.1f} % with, "
        f"{buys.wrong_without * 100:.1f} % without; left to a person: {buys.undecided * 100:.1f} %",
        f"cost: the gates take {cost * 100:.0f} % of the time of rating and fitting (10 % wanted)",
    ]
    return "\n".join(lines), kept


def main(words: Sequence[str]) -> int:
    """Print the page; 0 where every figure is reached."""
    plates = int(words[0]) if words else PLATES
    bench = the_bench()
    found = [
        result for _, result in run_tasks(tasks(bench, plates, SEED, clear_only=True), os.cpu_count() or 1)
    ]
    clean = next(result for result in found if isinstance(result, Clean))
    curves = [result for result in found if isinstance(result, Curve)]
    text, kept = report(clean, curves, bought(bench, min(plates, 200), SEED), cost_share(bench, BATCH))
    print(text)
    return 0 if kept else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
