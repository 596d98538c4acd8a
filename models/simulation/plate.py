"""Simulate one plate read: known truth, chosen noise and faults, a seeded generator.

Knows no file and no clock; what it returns is what an exporter would write and what a test may compare with.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from models.errors import UnknownName
from models.plates import plate_format, well_position
from models.simulation.design import Design
from models.simulation.faults import (
    ActivityLoss,
    BaselineWander,
    Bubble,
    Burst,
    Depletion,
    DriftingBlank,
    EdgeEffect,
    Fault,
    Lag,
    MissingReads,
    Overflow,
    PipettingError,
    TemperatureExcursion,
    Unsaturated,
)
from models.simulation.progress import effective_time, hill_product, michaelis_menten_product

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class LotTruth:
    """The constants a lot truly has.

    Attributes
    ----------
    law
        Rate law.
    k_um
        Michaelis constant, or the substrate at half the limiting rate [umol/L].
    kcat_per_s
        Turnover number per enzyme as the map counts it [1/s].
    hill_n
        Hill coefficient [1]; used by the Hill law alone.
    molar_mass_g_per_mol
        Molar mass [g/mol]: needed where the map gives enzyme by mass.
    loss_per_s
        First-order loss of activity [1/s].
    """

    k_um: float
    kcat_per_s: float
    law: Literal["michaelis_menten", "hill"] = "michaelis_menten"
    hill_n: float = 1.0
    molar_mass_g_per_mol: float | None = None
    loss_per_s: float = 0.0


@dataclass(frozen=True)
class Noise:
    """How much every well differs from the plan without anything having gone wrong.

    Attributes
    ----------
    signal_sd
        Standard deviation of each read, in signal.
    enzyme_cv, substrate_cv
        Coefficient of variation of the dispensed enzyme and substrate [1], drawn anew for each well.
    baseline_sd
        Standard deviation of the wells' baselines, in signal.
    """

    signal_sd: float = 0.0
    enzyme_cv: float = 0.0
    substrate_cv: float = 0.0
    baseline_sd: float = 0.0


TRIPLICATE_TRUTH = LotTruth(k_um=80.0, kcat_per_s=50.0)
"""With 1 nmol/L enzyme: Vmax 0.05 umol/L/s. See `triplicate_design`."""

TRIPLICATE_NOISE = Noise(signal_sd=0.0015, enzyme_cv=0.02, substrate_cv=0.02, baseline_sd=0.003)
"""1.5 mAU a read and 2 % for each of the two dispensing steps; baselines differ by 3 mAU."""


@dataclass(frozen=True)
class SimulatedPlate:
    """A plate read and what lies behind it.

    Attributes
    ----------
    wells
        Plate map frame, rows in the order of `signal`.
    time_s
        Times of the reads [s], shape (T,).
    signal
        What the instrument wrote, shape (W, T): +inf for an overflow, NaN for a missing read.
    temperature_c
        Temperature at each read [degC], shape (T,).
    truth
        One row a well: `well`, `lot`, `substrate_um` and `enzyme_nm` as dispensed, `v0_um_per_s` the
        steady initial rate of what was dispensed, `k_um`, `vmax_um_per_s` for the planned enzyme, `hill_n`
        (NaN without enzyme), and `faults`, the names of what struck the well, separated by commas.
    """

    wells: pd.DataFrame
    time_s: Array
    signal: Array
    temperature_c: Array
    truth: pd.DataFrame


@dataclass(frozen=True)
class _Bench:
    """The state of every well when the reaction starts, and what bears on it while it runs; arrays (W,)."""

    substrate_um: Array
    enzyme_nm: Array
    loss_per_s: Array
    transient_ratio: Array
    transient_per_s: Array
    turnover_per_s: Array
    excursions: tuple[TemperatureExcursion, ...] = ()


def simulate_plate(
    design: Design,
    truth: Mapping[str, LotTruth],
    noise: Noise,
    faults: Sequence[Fault],
    generator: np.random.Generator,
) -> SimulatedPlate:
    """Simulate a plate read.

    Faults of the same kind on the same well add up where that makes sense (turnover, jumps, loss) and the
    later one counts where it does not (lag and burst). The noise drawn does not depend on the faults, so
    that a plate with and one without a fault differ by the fault alone.

    Parameters
    ----------
    design
        The plate as planned.
    truth
        True constants by lot; every lot of the design needs them.
    noise
        Scatter of reads and dispensing.
    faults
        What goes wrong.
    generator
        Source of all randomness.

    Returns
    -------
    SimulatedPlate

    Raises
    ------
    UnknownName
        If a fault names a well or lot, or a well a lot, that is not known.
    ValueError
        If a well has a lot but no enzyme by amount, nor by mass with a molar mass.
    """
    wells = _planned_wells(design.wells, truth, faults)
    masks = [(fault, _struck(fault, wells, design.well_count)) for fault in faults]
    count, reads = len(wells), len(design.time_s)
    k, kcat, order, hill, loss = _constants(wells, truth)
    planned_enzyme = _enzyme_nm(wells, truth)
    planned_substrate = wells["substrate_um"].fillna(0.0).to_numpy(float)

    scatter = generator.standard_normal((3, count))
    read_noise = generator.standard_normal((count, reads))
    bench = _Bench(
        substrate_um=planned_substrate * np.maximum(0.0, 1.0 + noise.substrate_cv * scatter[0]),
        enzyme_nm=planned_enzyme * np.maximum(0.0, 1.0 + noise.enzyme_cv * scatter[1]),
        loss_per_s=loss,
        transient_ratio=np.ones(count),
        transient_per_s=np.zeros(count),
        turnover_per_s=np.zeros(count),
    )
    for fault, mask in masks:
        bench = _prepare(fault, mask, bench)

    vmax = kcat * bench.enzyme_nm / 1000.0
    turned_over = _react(bench, vmax, k, order, hill, design.time_s + design.dead_time_s)
    turned_over = np.minimum(turned_over, design.reagent_um)
    turned_over += wells["product_um"].fillna(0.0).to_numpy(float)[:, None]
    baseline = design.baseline_signal + noise.baseline_sd * scatter[2]
    signal = baseline[:, None] + design.signal_per_um * turned_over + noise.signal_sd * read_noise
    for fault, mask in masks:
        signal = _distort(fault, mask, signal, design.time_s)
    signal = np.where(signal > design.overflow_above, np.inf, signal)
    for fault, mask in masks:
        if isinstance(fault, MissingReads):
            signal[np.ix_(mask, np.array(fault.reads, dtype=int) - 1)] = np.nan

    with np.errstate(divide="ignore", invalid="ignore"):
        level = np.where(bench.substrate_um > 0, (bench.substrate_um / k) ** order, 0.0)
    frame = pd.DataFrame(
        {
            "well": wells["well"],
            "lot": wells["lot"],
            "substrate_um": bench.substrate_um,
            "enzyme_nm": bench.enzyme_nm,
            "v0_um_per_s": np.where(np.isnan(k), 0.0, vmax * level / (1.0 + level)),
            "k_um": k,
            "vmax_um_per_s": np.where(np.isnan(k), np.nan, kcat * planned_enzyme / 1000.0),
            "hill_n": np.where(np.isnan(k), np.nan, order),
            "faults": [",".join(f.name for f, mask in masks if mask[i]) for i in range(count)],
        }
    )
    return SimulatedPlate(wells, design.time_s, signal, _temperature(design, bench.excursions), frame)


def _planned_wells(
    wells: pd.DataFrame, truth: Mapping[str, LotTruth], faults: Sequence[Fault]
) -> pd.DataFrame:
    unknown = sorted(set(wells["lot"].dropna()) - set(truth))
    if unknown:
        raise UnknownName(
            f"lot '{unknown[0]}' has no true constants", remedy="give every lot of the design its constants"
        )
    planned = wells.reset_index(drop=True).copy()
    for fault in faults:
        if isinstance(fault, Unsaturated):
            mine = planned["lot"] == fault.lot
            if not mine.any():
                raise UnknownName(f"fault {fault.name} names lot '{fault.lot}', which is not on the plate")
            factor = fault.highest_over_k * truth[fault.lot].k_um / planned.loc[mine, "substrate_um"].max()
            planned.loc[mine, "substrate_um"] *= factor
    return planned


def _struck(fault: Fault, wells: pd.DataFrame, well_count: int) -> Mask:
    if isinstance(fault, EdgeEffect):
        plate = plate_format(well_count)
        places = [well_position(name) for name in wells["well"]]
        return np.array([r in (1, plate.row_count) or c in (1, plate.column_count) for r, c in places])
    if isinstance(fault, Unsaturated):
        return (wells["lot"] == fault.lot).to_numpy(bool)
    if isinstance(fault, TemperatureExcursion) or fault.wells is None:
        return np.ones(len(wells), dtype=bool)
    missing = sorted(set(fault.wells) - set(wells["well"]))
    if missing:
        raise UnknownName(f"fault {fault.name} names well '{missing[0]}', which the design does not use")
    return wells["well"].isin(fault.wells).to_numpy(bool)


def _constants(wells: pd.DataFrame, truth: Mapping[str, LotTruth]) -> tuple[Array, Array, Array, Mask, Array]:
    lots = [truth.get(lot) if isinstance(lot, str) else None for lot in wells["lot"]]
    k = np.array([np.nan if lot is None else lot.k_um for lot in lots])
    kcat = np.array([0.0 if lot is None else lot.kcat_per_s for lot in lots])
    hill = np.array([lot is not None and lot.law == "hill" for lot in lots])
    order = np.array([lot.hill_n if lot is not None and lot.law == "hill" else 1.0 for lot in lots])
    loss = np.array([0.0 if lot is None else lot.loss_per_s for lot in lots])
    return k, kcat, order, hill, loss


def _enzyme_nm(wells: pd.DataFrame, truth: Mapping[str, LotTruth]) -> Array:
    lots = [truth.get(lot) if isinstance(lot, str) else None for lot in wells["lot"]]
    mass = np.array([np.nan if lot is None else lot.molar_mass_g_per_mol or np.nan for lot in lots])
    # 1 ng/mL is 1 ug/L, and 1 ug/L over 1 g/mol is 1000 nmol/L.
    from_mass = 1000.0 * wells["enzyme_ng_per_ml"].to_numpy(float) / mass
    by_amount = wells["enzyme_nm"].to_numpy(float)
    with_lot = np.array([lot is not None for lot in lots])
    enzyme = np.where(with_lot, np.where(np.isnan(by_amount), from_mass, by_amount), 0.0)
    if np.isnan(enzyme).any():
        well = wells["well"][int(np.argmax(np.isnan(enzyme)))]
        raise ValueError(f"well {well} has a lot, but neither enzyme by amount nor by mass with a molar mass")
    return enzyme


def _prepare(fault: Fault, mask: Mask, bench: _Bench) -> _Bench:
    """What a fault does to the wells before the reaction starts, or to its course."""

    def scaled(values: Array, factor: float) -> Array:
        return np.where(mask, values * factor, values)

    match fault:
        case DriftingBlank():
            return replace(bench, turnover_per_s=bench.turnover_per_s + mask * fault.turnover_per_s)
        case Depletion():
            return replace(bench, enzyme_nm=scaled(bench.enzyme_nm, fault.enzyme_factor))
        case EdgeEffect():
            return replace(bench, enzyme_nm=scaled(bench.enzyme_nm, fault.rate_factor))
        case PipettingError():
            return replace(
                bench,
                enzyme_nm=scaled(bench.enzyme_nm, fault.enzyme_factor),
                substrate_um=scaled(bench.substrate_um, fault.substrate_factor),
            )
        case ActivityLoss():
            return replace(bench, loss_per_s=bench.loss_per_s + mask * fault.loss_per_s)
        case Lag() | Burst():
            ratio = fault.ratio if isinstance(fault, Burst) else 0.0
            return replace(
                bench,
                transient_ratio=np.where(mask, ratio, bench.transient_ratio),
                transient_per_s=np.where(mask, 1.0 / fault.time_constant_s, bench.transient_per_s),
            )
        case TemperatureExcursion():
            return replace(bench, excursions=(*bench.excursions, fault))
        case _:
            return bench


def _react(bench: _Bench, vmax: Array, k: Array, order: Array, hill: Mask, time_s: Array) -> Array:
    """Substrate turned over by each well at each time [umol/L], shape (W, T)."""

    def active(until_s: Array) -> Array:
        return effective_time(
            until_s[None, :],
            bench.transient_ratio[:, None],
            bench.transient_per_s[:, None],
            bench.loss_per_s[:, None],
        )

    clock = active(time_s)
    for excursion in bench.excursions:
        gain = excursion.factor_per_10_k ** (excursion.kelvin / 10.0) - 1.0
        inside = np.clip(time_s, excursion.start_s, excursion.end_s)
        clock = clock + gain * (active(inside) - active(np.full_like(time_s, excursion.start_s)))

    turned_over = np.multiply.outer(bench.substrate_um * bench.turnover_per_s, time_s)
    straight, cooperative = ~hill & ~np.isnan(k), hill
    column = (slice(None), None)
    turned_over[straight] += michaelis_menten_product(
        bench.substrate_um[straight][column], vmax[straight][column], k[straight][column], clock[straight]
    )
    turned_over[cooperative] += hill_product(
        bench.substrate_um[cooperative][column],
        vmax[cooperative][column],
        k[cooperative][column],
        order[cooperative][column],
        clock[cooperative],
    )
    return turned_over


def _distort(fault: Fault, mask: Mask, signal: Array, time_s: Array) -> Array:
    """What a fault does to the signal on its way to the file."""
    match fault:
        case BaselineWander():
            added = fault.amplitude * np.sin(2.0 * np.pi * time_s / fault.period_s)
        case Bubble():
            added = np.where(time_s >= fault.at_s, fault.jump, 0.0)
        case Overflow():
            added = np.full_like(time_s, fault.added_signal)
        case _:
            return signal
    return signal + mask[:, None] * added


def _temperature(design: Design, excursions: Sequence[TemperatureExcursion]) -> Array:
    temperature = np.full(len(design.time_s), design.temperature_c)
    for excursion in excursions:
        during = (design.time_s >= excursion.start_s) & (design.time_s <= excursion.end_s)
        temperature[during] += excursion.kelvin
    return temperature
