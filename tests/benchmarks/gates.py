"""What the gates catch, hold by mistake, cost and buy: python -m tests.benchmarks.gates [plates].

Plates under the conditions of DESIGN section 6 (Km 80 umol/L, 8 levels from 0.125 to 12 Km in triplicate, 2 %
for each of two dispensing steps, 1.5 mAU a read), one lot and a reference, with the faults of a size that a
practitioner calls clear, in a subject drawn at random: so also in wells with little signal, where no rule
sees a small fault. A fault is large where it exceeds 5 standard errors of its own estimate:

- blank: the standard error of the blank's slope over the well's window;
- substrate consumed: that of a line's rise over the reads of the shortest window, over the substrate;
- change of slope, jump, lag: least squares on the fault's trace in the well's reads before the conversion
  limit, beside the well's own start and amount of enzyme; activity lost: over all reads of the lot;
- enzyme missing: the well's residual, s / sqrt(1 - leverage), with dispensing and the rate's own error;
- edge: wells at the edge against wells of the same lot and level inside, weighted by their variances;
- highest substrate, reads past the limit: always large, noise plays no part.
"""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from checks.gates import resolve_limits
from flows.proving.bench import ProvingBench, common_bench
from flows.proving.characteristics import Clean, CleanGate, Curve, Task, run_tasks, simulate, through_line
from flows.proving.trials import TRIALS, Site, Struck, Trial
from flows.site.configuration import load_configuration
from flows.site.shipped import shipped
from models.records.assay import Assay
from models.simulation import (
    TRIPLICATE_NOISE,
    TRIPLICATE_TRUTH,
    SimulatedPlate,
    level_layout,
    substrate_levels,
    triplicate_design,
)
from models.simulation.faults import Bubble, Depletion, Fault, PipettingError

PLATES, SEED = 500, 20260105
BATCH = 48
MOST_BOUGHT = 200
"""Plates for what the gates buy: enough for a share to one in a hundred."""
COST_PLATES, COST_RUNS = 16, 2
MOST_HELD, MOST_WELLS_HELD = 0.01, 0.03
LEAST_CAUGHT, LEAST_NAMED = 0.98, 0.95
MARGIN = 0.10
"""A lot is taken for like its reference where its kcat/Km is within 10 % of it."""
RATIOS = (1.0, 0.8)
"""True kcat/Km of the lot over the reference's: on every other plate it is unlike."""
WANTED = (
    "blank's share of the rate",
    "substrate consumed in the shortest window",
    "change of slope",
    "highest substrate over K",
    "top reads past the linear limit",
    "jump of the signal",
    "lag, share of the read",
    "enzyme missing in one well",
    "edge effect",
    "activity lost over the read",
)
OF_ENZYME_LEVELS = ("enzyme_linearity", "enzyme_inactivation")
MOST_COST = 0.10


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


def two_level_bench(bench: ProvingBench) -> ProvingBench:
    """The same with the lot at two enzyme levels, as the tests of enzyme and time need them."""
    columns: list[dict[str, object]] = []
    for role, lot, enzyme_nm in (
        ("reference", "reference", 1.0),
        ("sample", "lot", 1.0),
        ("sample", "lot", 2.0),
    ):
        columns += [{"role": role, "lot": lot, "enzyme_nm": enzyme_nm}] * 3
    columns += [{"role": "blank"}] * 3
    wells = level_layout(96, substrate_levels(80.0, 8, 0.125, 12.0), columns)
    return replace(bench, design=replace(bench.design, wells=wells))


def trial(name: str) -> Trial:
    """One of the trials, by name."""
    return next(each for each in TRIALS if each.name == name)


def _lost_by_the_lot(site: Site, share: float) -> Struck:
    """Activity lost by the lot with two enzyme levels: Selwyn's test cannot judge the reference's one."""
    of_lot = site.rates[site.rates["lot"] == "lot"].reset_index(drop=True)
    return trial("activity lost over the read").strike(replace(site, rates=of_lot), share)


def parts(bench: ProvingBench, plates: int, seed: int, names: Sequence[str] = WANTED) -> list[Task]:
    """Clean plates of both layouts, every fault, and the loss that two enzyme levels must give its name."""
    two = two_level_bench(bench)
    loss = trial("activity lost over the read")
    at_two = replace(
        loss, name="the same, two enzyme levels", named_by=("enzyme_inactivation",), strike=_lost_by_the_lot
    )
    return [
        Task(bench, None, plates, seed),
        Task(two, None, plates, seed),
        *(Task(bench, trial(name), plates, seed, (trial(name).clear,)) for name in names),
        Task(two, at_two, plates, seed, (at_two.clear,)),
    ]


@dataclass(frozen=True)
class Bought:
    """Faulty plates with and without gates.

    Attributes
    ----------
    km_error_with, km_error_without
        Median relative error of the lot's Km.
    wrong_with, wrong_without
        Share of lots called like their reference and not so, or the other way round; with gates, of those
        that the gates leave to be decided.
    undecided
        Share of lots that the gates leave to a person.
    """

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
    for first in range(0, plates, BATCH):
        numbers = range(first, min(first + BATCH, plates))
        fitted = through_line(bench, [_faulty_plate(bench, seed, n) for n in numbers])
        estimates, series = fitted.tables["estimates"], fitted.tables["series"]
        for number, work in zip(numbers, fitted.plates, strict=True):
            mine = estimates[(estimates["analysis_id"] == work.analysis_id) & estimates["chosen"]]
            lot = series[(series["analysis_id"] == work.analysis_id) & (series["lot"] == "lot")]
            held = lot["standing"].iloc[0] != "clear"
            undecided += held
            alike = abs(RATIOS[number % 2] - 1.0) <= MARGIN
            for wells, errors in km.items():
                of = mine[mine["wells"] == wells].set_index(["lot", "constant"])["value"]
                if ("lot", "km") not in of or (wells == "clear" and held):
                    continue
                errors.append(abs(of["lot", "km"] / bench.truth["lot"].k_um - 1.0))
                ratio = of["lot", "kcat_per_km"] / of["reference", "kcat_per_km"]
                wrong[wells].append((abs(ratio - 1.0) <= MARGIN) != alike)
    return Bought(
        float(np.median(km["clear"])),
        float(np.median(km["all"])),
        float(np.mean(wrong["clear"])),
        float(np.mean(wrong["all"])),
        undecided / plates,
    )


def _faulty_plate(bench: ProvingBench, seed: int, number: int) -> SimulatedPlate:
    kcat = TRIPLICATE_TRUTH.kcat_per_s * RATIOS[number % 2]
    truth = {**bench.truth, "lot": replace(bench.truth["lot"], kcat_per_s=kcat)}
    return simulate(replace(bench, truth=truth), (seed, 3, number), _three_faults(bench, seed, number))


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


@dataclass(frozen=True)
class Cost:
    """Processor seconds for plates of 384 wells: rating and fitting alone, and what the gates add."""

    plates: int
    plain_s: float
    gates_s: float

    @property
    def share(self) -> float:
        """Gates over the rest."""
        return self.gates_s / self.plain_s


def cost(bench: ProvingBench, plates: int, runs: int = COST_RUNS) -> Cost:
    """Time plates of 384 wells with 15 lots, once with all gates on and once with all off, turn by turn.

    What the gates add is all they cause: frames, metrics, validation, findings, and that series are fitted
    again without the wells that they hold. Reading the files is not counted, so the share is a little high.
    """
    lots = ["reference", *(f"lot {number}" for number in range(1, 15))]
    design = triplicate_design(lots=lots, well_count=384)
    full = replace(
        bench,
        design=replace(bench.design, well_count=384, wells=design.wells),
        truth=dict.fromkeys(lots, TRIPLICATE_TRUTH),
    )
    off = replace(full, limits={name: {**limits, "on": False} for name, limits in full.limits.items()})
    made = [simulate(full, (SEED, 5, number)) for number in range(plates)]
    # Once before: importing Great Expectations is no cost of a plate.
    through_line(full, made[:1])
    seconds: dict[bool, list[float]] = {True: [], False: []}
    for _ in range(runs):
        for gated, on in ((full, True), (off, False)):
            begun = time.process_time()
            through_line(gated, made)
            seconds[on].append(time.process_time() - begun)
    plain = min(seconds[False])
    return Cost(plates, plain, max(min(seconds[True]) - plain, 0.0))


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
                else f"{point.size:g} {curve.trial.unit}".replace("signal", "AU"),
                "large": point.large / point.plates,
                "caught": point.large_caught / point.large if point.large else np.nan,
                "named": point.large_named / point.large_caught if point.large_caught else np.nan,
                "caught_of_all": point.caught / point.plates,
            }
        )
    return pd.DataFrame(rows)


def clean_rows(plain: Clean, two_levels: Clean) -> list[CleanGate]:
    """Gates of the plain layout; those that need several enzyme levels from the layout that has them."""
    return [
        *(each for each in plain.gates if each.gate not in OF_ENZYME_LEVELS),
        *(each for each in two_levels.gates if each.gate in OF_ENZYME_LEVELS),
    ]


def report(
    plain: Clean, two_levels: Clean, curves: Sequence[Curve], buys: Bought, costs: Cost
) -> tuple[str, bool]:
    """The printed page, at 80 columns, and whether every figure is reached."""
    lines = ["Clean plates", f"{'gate':25} {'of':10} {'judged':>7} {'held':>5} {'share %':>8}"]
    kept = True
    for each in clean_rows(plain, two_levels):
        if each.assessed == 0:
            lines.append(f"{each.gate:25} {each.subject:10} {0:7d}     –        –  nothing to judge by")
            continue
        share = each.held / each.assessed
        kept &= share <= MOST_HELD
        flag = "" if share <= MOST_HELD else "  above 1 %"
        lines.append(
            f"{each.gate:25} {each.subject:10} {each.assessed:7d} {each.held:5d} {share * 100:8.2f}{flag}"
        )
    for clean, layout in ((plain, "one enzyme level"), (two_levels, "two for the lot")):
        share = clean.held_well_count / clean.well_count
        kept &= share <= MOST_WELLS_HELD
        flag = "" if share <= MOST_WELLS_HELD else "  above 3 %"
        lines.append(f"all gates hold {share * 100:.2f} % of {clean.well_count} wells ({layout}){flag}")
    lines += ["", "Faults: large is beyond 5 standard errors; caught and named in % of the large"]
    lines.append(f"{'fault':41} {'size':>6} {'large %':>8} {'caught':>7} {'named':>6}")
    for row in fault_rows(curves).itertuples(index=False):
        reached = row.caught >= LEAST_CAUGHT and row.named >= LEAST_NAMED
        kept &= reached
        lines.append(
            f"{row.fault:41} {row.size:>6} {row.large * 100:8.1f} {row.caught * 100:7.1f} "
            f"{row.named * 100:6.1f}{'' if reached else '  short'}"
        )
    kept &= costs.share <= MOST_COST
    lines += [
        "",
        "What the gates buy, on plates with three struck wells among the lot's 24",
        f"median error of Km: {buys.km_error_with * 100:.1f} % with gates, "
        f"{buys.km_error_without * 100:.1f} % without",
        f"kcat/Km called within 10 % of the reference's, or not, wrongly: "
        f"{buys.wrong_with * 100:.1f} % with,",
        f"{buys.wrong_without * 100:.1f} % without; left to a person: {buys.undecided * 100:.1f} %",
        "",
        f"Cost: gates {costs.gates_s:.1f} s, rating and fitting {costs.plain_s:.1f} s of processor, "
        f"{costs.plates} plates of 384",
        f"wells: {costs.share * 100:.0f} %, {MOST_COST * 100:.0f} % wanted"
        f"{'' if costs.share <= MOST_COST else '  above'}",
    ]
    return "\n".join(lines), kept


def main(words: Sequence[str]) -> int:
    """Print the page; 0 where every figure is reached."""
    plates = int(words[0]) if words else PLATES
    bench = the_bench()
    found = [result for _, result in run_tasks(parts(bench, plates, SEED), os.cpu_count() or 1)]
    plain, two_levels = (result for result in found if isinstance(result, Clean))
    curves = [result for result in found if isinstance(result, Curve)]
    buys = bought(bench, min(plates, MOST_BOUGHT), SEED)
    text, kept = report(plain, two_levels, curves, buys, cost(bench, min(plates, COST_PLATES)))
    print(text)
    return 0 if kept else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
