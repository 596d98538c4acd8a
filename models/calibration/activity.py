"""Enzyme activity in a sample from the rate in the assay: U and katal, per mL and per mg.

1 U = 1 umol/min (Enzyme Commission 1964), 1 kat = 1 mol/s (CGPM 1999, resolution 12), so 1 U = 1/60 ukat,
16.67 nkat. Units as people write them meet pint here; inside, names carry the unit.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cache
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from models.errors import UnknownName

Floats = NDArray[np.float64]
ActivityKind = Literal["activity", "per_volume", "per_mass"]

S_PER_MIN = 60.0
NKAT_PER_UKAT = 1000.0

_BASE = {"per_volume": "U/mL", "per_mass": "U/mg", "activity": "U"}
_DIMENSIONS: dict[ActivityKind, str] = {
    "per_volume": "[substance] / [time] / [length] ** 3",
    "per_mass": "[substance] / [time] / [mass]",
    "activity": "[substance] / [time]",
}
# The whole of what people write for activity: longer or stranger text never reaches pint.
_PLAUSIBLE = re.compile(r"(?:[a-zA-Zµ]{1,16})(?:/[a-zA-Zµ]{1,10}){0,2}")


@dataclass(frozen=True, eq=False)
class Activity:
    """Activity of the undiluted sample; per mg is NaN where its protein is not known.

    Attributes
    ----------
    u_per_ml, nkat_per_ml
        Volume activity [umol/min/mL] and [nmol/s/mL].
    u_per_mg, nkat_per_mg
        Specific activity, per mg of protein [umol/min/mg] and [nmol/s/mg].
    """

    u_per_ml: Floats
    nkat_per_ml: Floats
    u_per_mg: Floats
    nkat_per_mg: Floats


def activity(
    rate_um_per_s: Floats,
    assay_volume_ul: Floats | float,
    sample_volume_ul: Floats | float,
    dilution: Floats | float = 1.0,
    protein_mg_per_ml: Floats | float = np.nan,
) -> Activity:
    """Activity of a sample from the rate that some of it gives in the assay.

    b = rate (assay volume / sample volume) dilution; 1 umol/L/s is 1 nkat/mL. Standard errors and interval
    ends of a rate convert in the same way. The classic slip is to take `dilution` as the share of sample,
    0.01, in place of the factor, 100.

    Parameters
    ----------
    rate_um_per_s
        Substrate turned over [umol/L/s] in the assay mixture.
    assay_volume_ul, sample_volume_ul
        Volume of the assay mixture, and of the diluted sample in it [uL].
    dilution
        How many times the sample was diluted before it was pipetted; 1 for not at all.
    protein_mg_per_ml
        Protein of the undiluted sample [mg/mL]; NaN where not known.

    Returns
    -------
    Activity
        All of the shape that the arguments broadcast to; NaN where a volume is not above 0, the sample is
        more than the mixture, or the dilution is below 1.
    """
    rate, mixture, sample, fold, protein = np.broadcast_arrays(
        *(
            np.asarray(each, dtype=np.float64)
            for each in (rate_um_per_s, assay_volume_ul, sample_volume_ul, dilution, protein_mg_per_ml)
        )
    )
    possible = (sample > 0) & (mixture >= sample) & (fold >= 1)
    with np.errstate(all="ignore"):
        nkat_per_ml = np.where(possible, rate * (mixture / sample) * fold, np.nan)
        nkat_per_mg = np.where(protein > 0, nkat_per_ml / protein, np.nan)
    return Activity(u_from_nkat(nkat_per_ml), nkat_per_ml, u_from_nkat(nkat_per_mg), nkat_per_mg)


def u_from_nkat(nkat: Floats) -> Floats:
    """Units [umol/min] from nanokatal [nmol/s]: times 0.06."""
    units: Floats = nkat * S_PER_MIN / NKAT_PER_UKAT
    return units


def nkat_from_u(u: Floats) -> Floats:
    """Nanokatal [nmol/s] from units [umol/min]: times 1000 / 60."""
    nkat: Floats = u * NKAT_PER_UKAT / S_PER_MIN
    return nkat


@cache
def activity_factor(unit: str) -> tuple[ActivityKind, float]:
    """What kind of activity a unit measures, and the factor to U, U/mL or U/mg.

    Parameters
    ----------
    unit
        As written: `U/mL`, `kU/L`, `nkat/mL`, `µkat/L`, `kat/kg`, `umol/min/mg`, `U` ...

    Returns
    -------
    tuple
        `("per_volume", factor to U/mL)`, `("per_mass", factor to U/mg)` or `("activity", factor to U)`.

    Raises
    ------
    UnknownName
        If it is no unit of enzyme activity. `IU` is refused: it is defined substance by substance.
    """
    remedy = "write an activity, such as U/mL, kU/L, nkat/mL or U/mg"
    written = unit.strip().replace("μ", "µ")
    if not _PLAUSIBLE.fullmatch(written):
        raise UnknownName(f"'{unit}' is not a unit of activity", remedy=remedy)
    registry = _registry()
    try:
        quantity = registry.Quantity(1.0, registry.parse_units(written))
        for kind, dimensions in _DIMENSIONS.items():
            if quantity.check(dimensions):
                return kind, float(f"{float(quantity.to(_BASE[kind]).magnitude):.14g}")
    # pint raises many kinds for text that is no unit (undefined name, syntax, type).
    except Exception as unreadable:
        raise UnknownName(f"'{unit}' is not a unit of activity", remedy=remedy) from unreadable
    raise UnknownName(f"'{unit}' is not a unit of activity", remedy=remedy)


@cache
def _registry() -> Any:
    """A unit registry; building it takes half a second, so it waits for the first unit."""
    import pint

    return pint.UnitRegistry(cache_folder=None)
