"""The faults that gates are tried with: their sizes, what they strike, and which gates should name them.

A fault strikes one subject of a plate, drawn at random: a well, a lot's series, or the whole plate. Each
trial also says how large the fault is against the error of its own estimate: no rule sees what noise drowns.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
import pandas as pd

from flows.proving.bench import ProvingBench
from flows.proving.sizes import curve_size, edge_error, residual_error
from models.simulation import SimulatedPlate
from models.simulation.faults import (
    ActivityLoss,
    Bubble,
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

Subject = Literal["well", "series", "plate_read"]


@dataclass(frozen=True)
class Struck:
    """A fault on one plate.

    Attributes
    ----------
    faults
        What the simulation is told.
    wells
        Enzyme wells that it strikes: all of a lot's, or of the plate, where the subject is more than a well.
    lot
        The lot struck; None where the subject is the plate read.
    standard_errors
        Size of the fault in standard errors of its own estimate; infinite where noise plays no part.
    """

    faults: tuple[Fault, ...]
    wells: tuple[str, ...]
    lot: str | None
    standard_errors: float


@dataclass(frozen=True)
class Site:
    """What a trial knows of the plate that it strikes: the bench, the clean twin, and its clean rates."""

    bench: ProvingBench
    clean: SimulatedPlate
    rates: pd.DataFrame
    generator: np.random.Generator

    def any_well(self) -> pd.Series:
        """A well with enzyme, with its rate's row."""
        return self.rates.iloc[int(self.generator.integers(len(self.rates)))]

    def any_lot(self) -> str:
        """A lot of the plate."""
        lots = sorted(set(self.rates["lot"]))
        return str(lots[int(self.generator.integers(len(lots)))])

    def wells_of(self, lot: str) -> tuple[str, ...]:
        """Wells of one lot."""
        return tuple(self.rates.loc[self.rates["lot"] == lot, "well"])

    @property
    def read_sd_um(self) -> float:
        """Noise of a read as substrate turned over [umol/L]."""
        return self.bench.noise.signal_sd / abs(self.bench.design.signal_per_um)

    @property
    def length_s(self) -> float:
        """Length of the read [s]."""
        return float(self.bench.design.time_s[-1])

    def until_limit_s(self, row: pd.Series) -> float:
        """Time of a clean well's conversion limit [s], or the read's end: an initial rate sees no more."""
        limit = float(self.bench.limits["substrate_depletion"]["limit"])
        return min(limit * float(row["substrate_um"]) / float(row["v0_um_per_s"]), self.length_s)

    def in_curve(self, row: pd.Series, fault: Callable[[tuple[str, ...]], Fault]) -> Struck:
        """A fault that bends one well's curve, seen in the reads of its initial rate."""
        well = (str(row["well"]),)
        made = fault(well)
        return Struck((made,), well, None, curve_size(self.bench, (made,), well, (self.until_limit_s(row),)))


@dataclass(frozen=True)
class Trial:
    """One kind of fault.

    Attributes
    ----------
    name, unit
        As tables print it; the unit `%` prints shares times 100.
    sizes
        From hardly there to glaring.
    clear
        The size that a practitioner calls clear.
    subject
        What is caught: the well struck, the series, or the plate read.
    named_by
        Gates that name it rightly.
    strike
        From the plate and a size to the fault.
    """

    name: str
    unit: str
    sizes: tuple[float, ...]
    clear: float
    subject: Subject
    named_by: tuple[str, ...]
    strike: Callable[[Site, float], Struck]


def _in_well(row: pd.Series, fault: Callable[[tuple[str, ...]], Fault], standard_errors: float) -> Struck:
    """A fault in one well."""
    well = (str(row["well"]),)
    return Struck((fault(well),), well, None, float(standard_errors))


def _blank(site: Site, share: float) -> Struck:
    """Substrate of one level turns over by itself, so that `share` of its wells' raw rate is the blank's."""
    row = site.any_well()
    same = site.clean.wells["substrate_um"] == row["substrate_um"]
    turnover = share / (1.0 - share) * row["v0_um_per_s"] / row["substrate_um"]
    struck = tuple(site.clean.wells.loc[same, "well"])
    blank = turnover * row["substrate_um"]
    return Struck(
        (DriftingBlank(float(turnover), struck),),
        (str(row["well"]),),
        None,
        float(blank / row["blank_rate_se_um_per_s"]),
    )


def _depletion(site: Site, conversion: float) -> Struck:
    """Enzyme enough in one well to turn over `conversion` within the shortest usable window."""
    row = site.any_well()
    shortest = site.bench.assay.window.shortest_points
    time_s = float(site.bench.design.time_s[shortest - 1])
    k_um = site.bench.truth[str(row["lot"])].k_um
    substrate = float(row["substrate_um"])
    vmax = float(row["v0_um_per_s"]) * (k_um + substrate) / substrate
    # Never less enzyme than planned: that would be another fault.
    factor = max((substrate * conversion - k_um * np.log1p(-conversion)) / (vmax * time_s), 1.0)
    # That of a line's rise over its reads, on substrate.
    error = site.read_sd_um * np.sqrt(12.0 / shortest) / substrate
    return Struck(
        (Depletion(float(factor), (str(row["well"]),)),), (str(row["well"]),), None, conversion / error
    )


def _bend(site: Site, change: float) -> Struck:
    """Activity of one well falls by `change` over the reads before the conversion limit."""
    row = site.any_well()
    loss = -np.log1p(-change) / site.until_limit_s(row)
    return site.in_curve(row, lambda well: ActivityLoss(float(loss), well))


def _unsaturated(site: Site, ratio: float) -> Struck:
    """The levels of one lot end at `ratio` times K."""
    lot = site.any_lot()
    return Struck((Unsaturated(ratio, lot),), site.wells_of(lot), lot, np.inf)


def _overflow(site: Site, share: float) -> Struck:
    """Something in the well lifts the top `share` of its window's reads past the detector's linear limit."""
    row = site.any_well()
    window = slice(int(row["window_first_read"]) - 1, int(row["window_last_read"]))
    signal = site.clean.signal[site.clean.wells["well"].tolist().index(row["well"])][window]
    limit = site.bench.assay.signal.linear_limit
    end = site.bench.design.overflow_above if limit is None else limit
    lifted = np.sort(signal)[::-1][max(int(np.ceil(share * signal.size)) - 1, 0)]
    added = end - lifted + 3.0 * site.bench.noise.signal_sd
    return _in_well(row, lambda well: Overflow(float(added), well), np.inf)


def _bubble(site: Site, jump: float) -> Struck:
    """The signal of one well jumps within its window and stays there."""
    row = site.any_well()
    start, end = float(row["window_start_s"]), float(row["window_end_s"])
    at_s = start + float(site.generator.uniform(0.25, 0.75)) * (end - start)
    return site.in_curve(row, lambda well: Bubble(at_s, jump, well))


def _lag(site: Site, share: float) -> Struck:
    """One well reaches its steady rate after `share` of the read: three time constants."""
    row = site.any_well()
    return site.in_curve(row, lambda well: Lag(share * site.length_s / 3.0, well))


def _pipetting(site: Site, share: float) -> Struck:
    """One well got `share` less enzyme than planned."""
    row = site.any_well()
    error = residual_error(site.bench, site.rates[site.rates["lot"] == row["lot"]], str(row["well"]))
    return _in_well(row, lambda well: PipettingError(enzyme_factor=1.0 - share, wells=well), share / error)


def _edge(site: Site, share: float) -> Struck:
    """Wells at the plate's edge run `share` slower."""
    error = edge_error(site.bench, site.rates)
    return Struck((EdgeEffect(1.0 - share),), tuple(site.rates["well"]), None, share / error)


def _lost_activity(site: Site, share: float) -> Struck:
    """A lot loses `share` of its activity by the end of the read."""
    lot = site.any_lot()
    loss = -np.log1p(-share) / site.length_s
    wells = site.wells_of(lot)
    fault = ActivityLoss(float(loss), wells)
    # Whole curves see all reads.
    size = curve_size(site.bench, (fault,), wells, (site.length_s,) * len(wells))
    return Struck((fault,), wells, lot, size)


def _temperature(site: Site, kelvin: float) -> Struck:
    """The plate is `kelvin` too warm in the middle of the read."""
    third = site.length_s / 3.0
    return Struck(
        (TemperatureExcursion(third, 2.0 * third, kelvin),), tuple(site.rates["well"]), None, np.inf
    )


def _missing(site: Site, share: float) -> Struck:
    """The instrument left out `share` of one well's reads."""
    row = site.any_well()
    reads = site.bench.design.time_s.size
    count = max(round(share * reads), 1)
    first = int(site.generator.integers(2, max(reads - count, 3)))
    gone = tuple(range(first, min(first + count, reads)))
    return _in_well(row, lambda well: MissingReads(gone, well), np.inf)


SLOPE = "initial_slope_nonlinear"
TRIALS: tuple[Trial, ...] = (
    Trial(
        "blank's share of the rate", "%", (0.05, 0.1, 0.15, 0.2, 0.3), 0.2, "well", ("blank_drift",), _blank
    ),
    Trial(
        "substrate consumed in the shortest window",
        "%",
        (0.05, 0.1, 0.15, 0.2, 0.4),
        0.2,
        "well",
        ("substrate_depletion",),
        _depletion,
    ),
    Trial(
        "change of slope", "%", (0.05, 0.1, 0.2, 0.3, 0.5), 0.2, "well", (SLOPE, "outlier_in_series"), _bend
    ),
    Trial(
        "highest substrate over K",
        "K",
        (5.0, 4.0, 3.0, 2.0, 1.0),
        1.0,
        "series",
        ("saturation_not_reached",),
        _unsaturated,
    ),
    Trial(
        "top reads past the linear limit",
        "%",
        (0.1, 0.2, 0.5, 0.8, 1.0),
        0.5,
        "well",
        ("detector_range",),
        _overflow,
    ),
    Trial(
        "jump of the signal",
        "signal",
        (0.005, 0.01, 0.03, 0.1, 0.2),
        0.1,
        "well",
        (SLOPE, "substrate_depletion", "outlier_in_series"),
        _bubble,
    ),
    Trial("lag, share of the read", "%", (0.05, 0.1, 0.2, 0.4, 0.6), 0.2, "well", (SLOPE,), _lag),
    Trial(
        "enzyme missing in one well",
        "%",
        (0.05, 0.1, 0.15, 0.25, 0.4),
        0.25,
        "well",
        ("outlier_in_series", "replicate_scatter"),
        _pipetting,
    ),
    Trial("edge effect", "%", (0.02, 0.05, 0.075, 0.1, 0.15), 0.1, "plate_read", ("plate_position",), _edge),
    Trial(
        "activity lost over the read",
        "%",
        (0.05, 0.1, 0.15, 0.25, 0.5),
        0.25,
        "series",
        ("enzyme_inactivation", "initial_vs_full_curve", SLOPE),
        _lost_activity,
    ),
    Trial(
        "temperature off",
        "K",
        (0.2, 0.4, 0.6, 1.0, 2.0),
        1.0,
        "plate_read",
        ("temperature_band",),
        _temperature,
    ),
    Trial("reads missing", "%", (0.02, 0.04, 0.06, 0.1, 0.2), 0.1, "well", ("read_schedule",), _missing),
)


def for_bench(bench: ProvingBench, trials: Sequence[Trial] = TRIALS) -> list[Trial]:
    """Trials that mean something for this bench; a jump is scaled to the signal that it reads."""
    chosen = []
    for trial in trials:
        if trial.strike is _temperature and bench.assay.conditions.temperature_c is None:
            continue
        if trial.strike is _overflow and (
            bench.assay.signal.linear_limit is None and not np.isfinite(bench.design.overflow_above)
        ):
            continue
        if trial.strike is _bubble and bench.assay.signal.kind != "absorbance":
            # 0.1 of absorbance is about 16 umol/L of a chromophore of 6220 L/mol/cm.
            scale = abs(bench.design.signal_per_um) / 6220e-6
            sizes = tuple(float(f"{size * scale:.3g}") for size in trial.sizes)
            trial = replace(trial, sizes=sizes, clear=float(f"{trial.clear * scale:.3g}"))
        chosen.append(trial)
    return chosen
