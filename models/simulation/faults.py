"""What can go wrong on a plate, each fault a frozen record with its size.

`wells` names the wells a fault strikes; None is the whole plate. What a fault does to the reaction or to
the signal is written in `models.simulation.plate`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

Wells = tuple[str, ...] | None


@dataclass(frozen=True)
class DriftingBlank:
    """Substrate turns over without enzyme: a first-order rate on the nominal substrate, blanks included."""

    name: ClassVar[str] = "drifting_blank"
    turnover_per_s: float
    wells: Wells = None


@dataclass(frozen=True)
class BaselineWander:
    """The signal of the whole plate wanders as one sine wave."""

    name: ClassVar[str] = "baseline_wander"
    amplitude: float
    period_s: float
    wells: Wells = None


@dataclass(frozen=True)
class Depletion:
    """Too much enzyme: substrate runs low within the first reads. The map still says the planned enzyme."""

    name: ClassVar[str] = "depletion"
    enzyme_factor: float
    wells: Wells = None


@dataclass(frozen=True)
class ActivityLoss:
    """The enzyme loses activity during the read, first order."""

    name: ClassVar[str] = "activity_loss"
    loss_per_s: float
    wells: Wells = None


@dataclass(frozen=True)
class Lag:
    """The rate rises exponentially from zero to its steady value."""

    name: ClassVar[str] = "lag"
    time_constant_s: float
    wells: Wells = None


@dataclass(frozen=True)
class Burst:
    """The rate falls exponentially from `ratio` times its steady value to that value."""

    name: ClassVar[str] = "burst"
    ratio: float
    time_constant_s: float
    wells: Wells = None


@dataclass(frozen=True)
class Unsaturated:
    """A lot's levels, map included, were planned too low: the highest is only this many K."""

    name: ClassVar[str] = "unsaturated"
    highest_over_k: float
    lot: str


@dataclass(frozen=True)
class Overflow:
    """Something in the well adds signal and takes it past the detector's range."""

    name: ClassVar[str] = "overflow"
    added_signal: float
    wells: Wells = None


@dataclass(frozen=True)
class Bubble:
    """The signal jumps at one time and stays there."""

    name: ClassVar[str] = "bubble"
    at_s: float
    jump: float
    wells: Wells = None


@dataclass(frozen=True)
class MissingReads:
    """Reads, counted from 1, that the instrument did not write."""

    name: ClassVar[str] = "missing_reads"
    reads: tuple[int, ...]
    wells: Wells = None


@dataclass(frozen=True)
class PipettingError:
    """A well got another volume of enzyme or substrate than planned."""

    name: ClassVar[str] = "pipetting_error"
    enzyme_factor: float = 1.0
    substrate_factor: float = 1.0
    wells: Wells = None


@dataclass(frozen=True)
class EdgeEffect:
    """The outermost wells are warmer or drier: their rates change by this factor."""

    name: ClassVar[str] = "edge_effect"
    rate_factor: float


@dataclass(frozen=True)
class TemperatureExcursion:
    """The plate leaves its temperature between two times; rates follow by the factor for 10 K.

    A factor of 2 for 10 K is common practice, no source.
    """

    name: ClassVar[str] = "temperature_excursion"
    start_s: float
    end_s: float
    kelvin: float
    factor_per_10_k: float = 2.0


Fault = (
    DriftingBlank
    | BaselineWander
    | Depletion
    | ActivityLoss
    | Lag
    | Burst
    | Unsaturated
    | Overflow
    | Bubble
    | MissingReads
    | PipettingError
    | EdgeEffect
    | TemperatureExcursion
)
