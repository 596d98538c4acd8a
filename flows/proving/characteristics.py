"""How often each gate holds what is clean, at which size it catches a fault, and what change can be seen.

Simulated plates go through the stages of a pass, a few dozen at a time; nothing is stored.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from multiprocessing import get_context

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.optimize import isotonic_regression
from scipy.stats import norm

from checks.gates import GATES, GateInput
from flows.proving.bench import ProvingBench
from flows.proving.trials import Site, Struck, Trial, for_bench
from flows.stages.fit import fit_batch
from flows.stages.gate import gate_batch, gate_input
from flows.stages.rate import rate_batch
from flows.stages.work import FittedBatch, RatedBatch
from models.simulation import SimulatedPlate, simulate_plate
from models.simulation.faults import Fault

Floats = NDArray[np.float64]

BATCH = 96
"""Plates that go through the line at once."""
LARGE = 5.0
"""Standard errors of its own estimate from which a fault counts as one that can be seen."""
MANY_WELLS = 0.25
"""Share of a lot's wells that a gate must hold to speak of the lot."""
LEVEL, POWER = 0.05, 0.80
PER_ENZYME_AND_K = ("kcat_per_km", "kcat_per_k_half")


@dataclass(frozen=True)
class CleanGate:
    """How often one gate holds clean subjects: those that it has a word on, held, and not assessed."""

    gate: str
    subject: str
    subjects: int
    held: int
    not_assessed: int

    @property
    def assessed(self) -> int:
        """Subjects that the gate could judge."""
        return self.subjects - self.not_assessed


@dataclass(frozen=True)
class Clean:
    """What happens to clean plates.

    Attributes
    ----------
    gates
        A row a gate and kind of subject.
    well_count, held_well_count
        Wells with enzyme, and those that any gate holds.
    log_ratio_sd
        Standard deviation between plates of the logarithm of kcat/K of one lot over another's; NaN where it
        is not known.
    """

    gates: tuple[CleanGate, ...]
    well_count: int
    held_well_count: int
    log_ratio_sd: float

    def smallest_change(self, plates: int) -> float:
        """Smallest relative change of kcat/K against the reference that N plates show.

        (z(0.975) + z(0.80)) s / sqrt(N) on the logarithm, two-sided at 5 %, with 80 % power (normal
        approximation with s known: Chow, Shao and Wang 2008, Sample Size Calculations in Clinical Research,
        section 3.1, from memory).
        """
        reach = (norm.ppf(1.0 - LEVEL / 2.0) + norm.ppf(POWER)) * self.log_ratio_sd / np.sqrt(plates)
        return float(np.expm1(reach))


@dataclass(frozen=True)
class Caught:
    """One fault at one size.

    Attributes
    ----------
    plates, large
        Plates tried, and those on which the fault is larger than 5 standard errors of its own estimate.
    caught, named
        Plates on which the subject was held, and by a gate that names the fault.
    large_caught, large_named
        The same of the large ones; `large_named` counts caught ones.
    gates
        Gates that held the subject, with the plates on which each did, the most frequent first.
    """

    size: float
    plates: int
    large: int
    caught: int
    named: int
    large_caught: int
    large_named: int
    gates: tuple[tuple[str, int], ...] = ()


@dataclass(frozen=True)
class Curve:
    """How a fault is caught over its sizes."""

    trial: Trial
    points: tuple[Caught, ...]

    def caught_by(self, most: int = 2) -> tuple[str, ...]:
        """Gates that catch it most often, over all sizes; none that has a tenth of the share of the first."""
        counts: Counter[str] = Counter()
        for point in self.points:
            counts.update(dict(point.gates))
        ordered = sorted(counts.items(), key=lambda item: (-item[1], item[0]))
        return tuple(gate for gate, count in ordered[:most] if count > 0.1 * ordered[0][1])

    def size_caught(self, share: float) -> float:
        """Size from which so many are caught, by isotonic regression between the sizes tried; NaN if none."""
        rates = np.array([point.caught / point.plates for point in self.points])
        smooth = np.asarray(isotonic_regression(rates).x, dtype=np.float64)
        above = np.flatnonzero(smooth >= share)
        if above.size == 0:
            return float("nan")
        place = int(above[0])
        sizes = np.array([point.size for point in self.points])
        if place == 0 or smooth[place] == smooth[place - 1]:
            return float(sizes[place])
        along = (share - smooth[place - 1]) / (smooth[place] - smooth[place - 1])
        return float(sizes[place - 1] + along * (sizes[place] - sizes[place - 1]))


def through_line(bench: ProvingBench, plates: Sequence[SimulatedPlate]) -> FittedBatch:
    """Take simulated plates through the stages of a pass."""
    works = [bench.work(number, plate) for number, plate in enumerate(plates)]
    return fit_batch(gate_batch(rate_batch(works)))


def simulate(bench: ProvingBench, seed: Sequence[int], faults: Sequence[Fault] = ()) -> SimulatedPlate:
    """One plate of the bench; the same seed gives the same noise, whatever the faults."""
    return simulate_plate(bench.design, bench.truth, bench.noise, faults, np.random.default_rng(list(seed)))


def prove_clean(bench: ProvingBench, plates: int, seed: int) -> Clean:
    """Take clean plates through the line."""
    tallies: dict[tuple[str, str], list[int]] = {}
    wells = held = 0
    ratios: list[float] = []
    for numbers in _batches(range(plates)):
        works = [bench.work(k, simulate(bench, (seed, 0, n))) for k, n in enumerate(numbers)]
        rated = rate_batch(works)
        tables = fit_batch(gate_batch(rated)).tables
        data = _judged(rated, tables)
        findings = tables["findings"]
        with_enzyme = tables["wells"]["role"].isin(("sample", "reference"))
        wells += int(with_enzyme.sum())
        held += int((with_enzyme & (tables["wells"]["standing"] != "clear")).sum())
        for gate in GATES.values():
            if not bench.limits[gate.name]["on"]:
                continue
            measured = gate.metrics(data)["subject"].value_counts()
            for subject in gate.subjects:
                mine = findings[(findings["gate"] == gate.name) & (findings["subject"] == subject)]
                tally = tallies.setdefault((gate.name, subject), [0, 0, 0])
                tally[0] += int(measured.get(subject, 0))
                tally[1] += int((mine["outcome"] == "breach").sum())
                tally[2] += int((mine["outcome"] == "not_assessed").sum())
        ratios += _log_ratios(tables["estimates"])
    return Clean(
        tuple(CleanGate(gate, subject, *tally) for (gate, subject), tally in tallies.items()),
        wells,
        held,
        float(np.std(ratios, ddof=1)) if len(ratios) > 2 else float("nan"),
    )


def prove_trial(
    bench: ProvingBench,
    trial: Trial,
    plates: int,
    seed: int,
    sizes: Sequence[float] | None = None,
) -> Curve:
    """Take plates with one kind of fault through the line, at each of its sizes."""
    tried = tuple(trial.sizes if sizes is None else sizes)
    seen: dict[float, list[_Outcome]] = {size: [] for size in tried}
    # All sizes go through the line together: a batch costs seconds, a plate in it a fraction of one.
    for numbers in _batches(range(plates), len(tried)):
        clean = [simulate(bench, (seed, 1, n)) for n in numbers]
        rates = rate_batch([bench.work(k, plate) for k, plate in enumerate(clean)])
        # Every size strikes the same subject of the same plate, and only the size differs.
        struck = [
            (size, n, trial.strike(_site(bench, plate, rates, k, (seed, 2, n)), size))
            for size in tried
            for k, (n, plate) in enumerate(zip(numbers, clean, strict=True))
        ]
        fitted = through_line(bench, [simulate(bench, (seed, 1, n), one.faults) for _, n, one in struck])
        for (size, _, one), work in zip(struck, fitted.plates, strict=True):
            seen[size].append(_caught(trial, one, fitted, work.analysis_id))
    points = [_counted(size, outcomes) for size, outcomes in seen.items()]
    return Curve(trial, tuple(points))


@dataclass(frozen=True)
class _Outcome:
    """One plate: the gates that held its subject, whether one names the fault, whether it is large."""

    gates: frozenset[str]
    named: bool
    large: bool


def _counted(size: float, seen: Sequence[_Outcome]) -> Caught:
    large = [one for one in seen if one.large]
    counts = Counter(gate for one in seen for gate in one.gates)
    return Caught(
        size,
        len(seen),
        len(large),
        sum(bool(one.gates) for one in seen),
        sum(one.named for one in seen),
        sum(bool(one.gates) for one in large),
        sum(one.named for one in large),
        tuple(sorted(counts.items(), key=lambda item: (-item[1], item[0]))),
    )


@dataclass(frozen=True)
class Task:
    """One part of a proof, which can run in a process of its own: clean plates, or a fault at its sizes."""

    bench: ProvingBench
    trial: Trial | None
    plates: int
    seed: int
    sizes: tuple[float, ...] | None = None

    def run(self) -> Clean | Curve:
        """Do it."""
        if self.trial is None:
            return prove_clean(self.bench, self.plates, self.seed)
        return prove_trial(self.bench, self.trial, self.plates, self.seed, self.sizes)


def tasks(bench: ProvingBench, plates: int, seed: int, *, clear_only: bool = False) -> list[Task]:
    """The parts of a proof: clean plates (as many as all sizes of a fault have), then every kind of fault.

    Parameters
    ----------
    plates
        Plates a size.
    clear_only
        Whether only the size is tried that a practitioner calls clear.
    """
    of_faults = [
        Task(bench, trial, plates, seed, (trial.clear,) if clear_only else None) for trial in for_bench(bench)
    ]
    return [Task(bench, None, plates if clear_only else 5 * plates, seed), *of_faults]


def run_tasks(parts: Sequence[Task], processes: int) -> Iterator[tuple[Task, Clean | Curve]]:
    """Run the parts on several processes; each result with its part, in the order of the parts."""
    if processes <= 1:
        yield from ((part, part.run()) for part in parts)
        return
    # Not by fork: the libraries of the gates start threads.
    with ProcessPoolExecutor(processes, mp_context=get_context("spawn")) as pool:
        yield from zip(parts, pool.map(Task.run, parts), strict=True)


def _batches(numbers: range, sizes: int = 1) -> Iterator[range]:
    """Plates that go through the line at once, each at so many sizes."""
    step = max(BATCH // sizes, 1)
    for first in range(0, len(numbers), step):
        yield numbers[first : first + step]


def _site(
    bench: ProvingBench, plate: SimulatedPlate, rated: RatedBatch, place: int, seed: Sequence[int]
) -> Site:
    """What a trial knows of one plate of a batch."""
    keys, analysis_id = ["analysis_id", "well"], rated.plates[place].analysis_id
    rates = rated.rates[rated.rates["analysis_id"] == analysis_id]
    own = rates.merge(rated.wells[[*keys, "lot", "role", "substrate_um"]], on=keys)
    own = own[own["role"].isin(("sample", "reference")) & (own["v0_um_per_s"] > 0)].reset_index(drop=True)
    return Site(bench, plate, own, np.random.default_rng(list(seed)))


def _caught(trial: Trial, struck: Struck, fitted: FittedBatch, analysis_id: str) -> _Outcome:
    findings = fitted.tables["findings"]
    mine = findings[(findings["analysis_id"] == analysis_id) & (findings["outcome"] == "breach")]
    if trial.subject == "well":
        on_series = _series_of(fitted, analysis_id, struck.wells)
        mine = mine[mine["well"].isin(struck.wells) | mine["series_id"].isin(on_series)]
    elif trial.subject == "series":
        on_series = _series_of(fitted, analysis_id, struck.wells)
        of_lot = mine["series_id"].isin(on_series) | (mine["lot"] == struck.lot)
        # A gate speaks of the lot where it holds the series, the lot, or many of its wells.
        wells = mine[mine["well"].isin(struck.wells)].groupby("gate").size()
        many = set(wells.index[wells >= MANY_WELLS * len(struck.wells)])
        mine = mine[of_lot | (mine["well"].isin(struck.wells) & mine["gate"].isin(many))]
    else:
        mine = mine[mine["subject"] == "plate_read"]
    gates = frozenset(mine["gate"])
    return _Outcome(gates, bool(gates & set(trial.named_by)), bool(struck.standard_errors > LARGE))


def _series_of(fitted: FittedBatch, analysis_id: str, wells: Sequence[str]) -> set[str]:
    table = fitted.tables["wells"]
    mine = (table["analysis_id"] == analysis_id) & table["well"].isin(wells) & table["series_id"].notna()
    return set(table.loc[mine, "series_id"])


def _judged(rated: RatedBatch, tables: Mapping[str, pd.DataFrame]) -> GateInput:
    """What the gates see of a fitted batch: to count the subjects that they have a word on."""
    points = tables["fit_points"].merge(tables["fits"][["fit_id", "series_id"]], on="fit_id")
    return gate_input(
        rated,
        series=tables["series"],
        estimates=tables["estimates"],
        fits=tables["fits"],
        points=points,
        comparisons=tables["comparisons"],
    )


def _log_ratios(estimates: pd.DataFrame) -> list[float]:
    """Log of kcat/K of a plate's second lot over its first's, a value a plate."""
    mine = estimates[
        (estimates["wells"] == "clear") & estimates["chosen"] & estimates["constant"].isin(PER_ENZYME_AND_K)
    ]
    ratios = []
    for _, rows in mine.sort_values("lot").groupby("analysis_id", sort=False):
        per_lot = rows.drop_duplicates("lot")["value"].to_numpy(dtype=float)
        if per_lot.size > 1:
            ratios.append(float(np.log(per_lot[1] / per_lot[0])))
    return ratios
