"""What a plate was meant to be: wells, read schedule and how product becomes signal.

Nothing here is random and nothing has gone wrong yet.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from models.plates import plate_format, well_name

Array = NDArray[np.float64]

MAP_COLUMNS = (
    "well",
    "role",
    "lot",
    "substrate_um",
    "enzyme_nm",
    "enzyme_ng_per_ml",
    "modulator",
    "modulator_um",
    "product_um",
)
_NUMBERS = ("substrate_um", "enzyme_nm", "enzyme_ng_per_ml", "modulator_um", "product_um")


@dataclass(frozen=True)
class Design:
    """A plate as planned.

    Attributes
    ----------
    well_count
        Plate format: 96, 384 or 1536.
    wells
        One row a used well, with the columns of `MAP_COLUMNS`: text None and numbers NaN where empty.
    time_s
        Times of the reads since the first one [s], shape (T,).
    signal_per_um
        Signal per umol/L of substrate turned over; negative where the signal falls.
    baseline_signal
        Signal of a well before any turnover.
    overflow_above
        Signal above which the instrument writes an overflow.
    reagent_um
        Turnover at which a reagent beside the substrate is used up and the reaction stops [umol/L].
    dead_time_s
        Time from the start of the reaction to the first read [s].
    temperature_c
        Temperature the plate is held at [degC].
    """

    well_count: int
    wells: pd.DataFrame
    time_s: Array
    signal_per_um: float
    baseline_signal: float = 0.08
    overflow_above: float = np.inf
    reagent_um: float = np.inf
    dead_time_s: float = 0.0
    temperature_c: float = 25.0


def map_frame(rows: Sequence[dict[str, object]]) -> pd.DataFrame:
    """Rows as a plate map frame: every column of `MAP_COLUMNS`, in order, with what is left out unknown."""
    columns = {name: [row.get(name) for row in rows] for name in MAP_COLUMNS}
    frame = pd.DataFrame(columns, dtype=object)
    return frame.astype(dict.fromkeys(_NUMBERS, "float64"))


def substrate_levels(km_um: float, levels: int, lowest: float, highest: float) -> Array:
    """Substrate levels from `lowest` to `highest` times Km, in equal ratios [umol/L]."""
    return np.asarray(km_um * np.geomspace(lowest, highest, levels), dtype=np.float64)


def level_layout(
    well_count: int,
    levels_um: Sequence[float] | Array,
    columns: Sequence[dict[str, object]],
) -> pd.DataFrame:
    """Lay wells out with a substrate level a row and what else they hold a column.

    On plates with more rows than levels the columns go on in further bands of rows below.

    Parameters
    ----------
    well_count
        Plate format.
    levels_um
        Substrate levels [umol/L].
    columns
        What the wells of each column share, keyed by `MAP_COLUMNS` names, such as
        ``{"role": "sample", "lot": "L1", "enzyme_nm": 1.0}``.

    Raises
    ------
    ValueError
        If the wells do not fit on the plate.
    """
    plate = plate_format(well_count)
    bands = plate.row_count // len(levels_um)
    if len(columns) > bands * plate.column_count:
        raise ValueError(
            f"{len(columns)} columns of {len(levels_um)} wells do not fit on a plate of {well_count} wells"
        )
    rows: list[dict[str, object]] = []
    for band in range(bands):
        shared = columns[band * plate.column_count : (band + 1) * plate.column_count]
        for place, level in enumerate(levels_um):
            rows += [
                {
                    "well": well_name(band * len(levels_um) + place + 1, number),
                    **what,
                    "substrate_um": float(level),
                }
                for number, what in enumerate(shared, start=1)
            ]
    return map_frame(rows)


def triplicate_design(
    *,
    km_um: float = 80.0,
    levels: int = 8,
    lowest: float = 0.125,
    highest: float = 12.0,
    replicates: int = 3,
    blanks: int = 3,
    lots: Sequence[str] = ("lot",),
    enzyme_nm: float = 1.0,
    well_count: int = 96,
    read_count: int = 61,
    interval_s: float = 10.0,
    signal_per_um: float = 6220e-6,
) -> Design:
    """The conditions under which recovery is measured: replicate wells of each lot at geometric levels.

    Defaults: Km 80 umol/L, 8 levels from 0.125 to 12 Km in triplicate, blanks at every level, a change of
    molar absorption of 6220 L/mol/cm (that of NADH at 340 nm; Horecker and Kornberg 1948, J. Biol. Chem.
    175, 385-390) over 1 cm. A read every 10 s for 10 min and, with `TRIPLICATE_TRUTH`, Vmax = 0.05
    umol/L/s: 10 % of the lowest level is turned over within about 180 s, of levels above about 2.7 Km not
    within the read. So both kinds of window occur, those that conversion ends and those that the read ends.

    Parameters
    ----------
    km_um
        Michaelis constant that the levels are multiples of [umol/L].
    levels, lowest, highest
        Number of levels, and the lowest and highest over Km.
    replicates, blanks
        Wells of each lot, and wells without enzyme, at each level.
    lots
        Lots on the plate; the first is called a reference if there are several.
    enzyme_nm
        Enzyme in each sample well [nmol/L].
    read_count, interval_s
        Read schedule.
    signal_per_um
        Signal per umol/L turned over.
    """
    several = len(lots) > 1
    columns: list[dict[str, object]] = [
        {"role": "reference" if several and lot == lots[0] else "sample", "lot": lot, "enzyme_nm": enzyme_nm}
        for lot in lots
        for _ in range(replicates)
    ]
    columns += [{"role": "blank"} for _ in range(blanks)]
    return Design(
        well_count=well_count,
        wells=level_layout(well_count, substrate_levels(km_um, levels, lowest, highest), columns),
        time_s=np.arange(read_count, dtype=np.float64) * interval_s,
        signal_per_um=signal_per_um,
    )
