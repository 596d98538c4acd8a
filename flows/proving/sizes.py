"""How large a fault is against the standard error of its own estimate: what noise drowns, no rule can see.

Least squares on what is known of the simulation; knows no gate and nothing of what was found.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from flows.proving.bench import ProvingBench
from models.plates import plate_format, well_position
from models.simulation import Noise, simulate_plate
from models.simulation.faults import Fault, PipettingError

Floats = NDArray[np.float64]

A_LITTLE = 1e-3


def curve_size(
    bench: ProvingBench, faults: Sequence[Fault], wells: Sequence[str], until_s: Sequence[float]
) -> float:
    """Size of what faults do to curves, in standard errors of its estimate.

    The estimate is least squares' over the reads of all these wells, each beside its own start and amount of
    enzyme: of the fault's trace in the signal only what these two cannot explain tells of it.

    Parameters
    ----------
    faults
        What goes wrong in these wells.
    wells
        Wells, with the time up to which each one's reads count [s].

    Returns
    -------
    float
        |estimate| / standard error for reads without noise; infinite where reads have none.
    """
    if bench.noise.signal_sd <= 0:
        return float("inf")
    plan = bench.design.wells
    plan = plan[plan["well"].isin(wells)]
    # Nothing but the trace is wanted: neither the detector's end nor noise.
    design = replace(bench.design, wells=plan, overflow_above=np.inf)

    def signal(of: Sequence[Fault]) -> Floats:
        return simulate_plate(design, bench.truth, Noise(), of, np.random.default_rng(0)).signal

    clean = signal(())
    trace = signal(faults) - clean
    enzyme = signal((PipettingError(enzyme_factor=1.0 + A_LITTLE),)) - clean
    until = dict(zip(wells, until_s, strict=True))
    square = 0.0
    for place, well in enumerate(plan["well"]):
        reads = np.flatnonzero(design.time_s <= until[well])
        if reads.size < 3:
            continue
        beside = np.stack([np.ones(reads.size), enzyme[place, reads]], axis=1)
        own = trace[place, reads]
        square += float(np.sum((own - beside @ np.linalg.lstsq(beside, own, rcond=None)[0]) ** 2))
    return float(np.sqrt(square)) / bench.noise.signal_sd


def relative_errors(bench: ProvingBench, rates: pd.DataFrame) -> Floats:
    """Standard deviation of each rate about its law, relative: dispensing, and the rate's own error."""
    order = _substrate_order(bench, rates)
    own = (rates["v0_se_um_per_s"] / rates["v0_um_per_s"]).to_numpy(dtype=float)
    noise = bench.noise
    return np.asarray(np.sqrt(noise.enzyme_cv**2 + (order * noise.substrate_cv) ** 2 + own**2))


def residual_error(bench: ProvingBench, rates: pd.DataFrame, well: str) -> float:
    """Standard error of how far one well's rate is off, relative to its rate.

    sigma / sqrt(1 - h), with h the well's leverage on Vmax and K of its lot (Cook and Weisberg 1982,
    Residuals and Influence in Regression, section 2.2, ISBN 978-0-412-24280-9).

    Parameters
    ----------
    rates
        Rates of the well's lot.
    """
    sigma = relative_errors(bench, rates)
    # Relative derivatives by ln Vmax and ln K.
    slopes = np.stack([np.ones(len(rates)), -_substrate_order(bench, rates)], axis=1) / sigma[:, None]
    hat = np.einsum("ij,jk,ik->i", slopes, np.linalg.pinv(slopes.T @ slopes), slopes)
    place = rates["well"].tolist().index(well)
    return float(sigma[place] / np.sqrt(max(1.0 - hat[place], 1e-9)))


def edge_error(bench: ProvingBench, rates: pd.DataFrame) -> float:
    """Standard error of an edge effect, relative: wells at the edge against wells of their own condition.

    Conditions (lot and level) that lie wholly at the edge, or wholly inside, tell nothing of it; the others
    are combined by their variances. Infinite where none tells.
    """
    form = plate_format(bench.design.well_count)
    places = [well_position(well) for well in rates["well"]]
    at_edge = np.array([r in (1, form.row_count) or c in (1, form.column_count) for r, c in places])
    told = pd.DataFrame(
        {
            "lot": rates["lot"].to_numpy(),
            "level": rates["substrate_um"].to_numpy(),
            "edge": at_edge,
            "inside": ~at_edge,
            "variance": relative_errors(bench, rates) ** 2,
        }
    )
    by = told.groupby(["lot", "level"])
    edge, inside = by["edge"].sum().to_numpy(dtype=float), by["inside"].sum().to_numpy(dtype=float)
    with np.errstate(divide="ignore"):
        weight = 1.0 / (by["variance"].mean().to_numpy() * (1.0 / edge + 1.0 / inside))
    total = float(np.sum(weight[np.isfinite(weight)]))
    return float(1.0 / np.sqrt(total)) if total > 0 else float("inf")


def _substrate_order(bench: ProvingBench, rates: pd.DataFrame) -> Floats:
    """Relative change of each rate for a relative change of its substrate."""
    truths = [bench.truth[str(lot)] for lot in rates["lot"]]
    hill = np.array([truth.hill_n if truth.law == "hill" else 1.0 for truth in truths])
    level = rates["substrate_um"].to_numpy(dtype=float) / np.array([truth.k_um for truth in truths])
    return np.asarray(hill / (1.0 + level**hill), dtype=np.float64)
