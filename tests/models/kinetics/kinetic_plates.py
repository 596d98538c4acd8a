"""Plates for the tests of rates: simulated ones as curve batches, and exact curves of one's own."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from models.kinetics.curves import CurveBatch
from models.simulation import Design, SimulatedPlate


def curve_batch(
    plates: Sequence[SimulatedPlate], design: Design, *, zero_is_blank: bool = False
) -> CurveBatch:
    """Curves of simulated plates; a series is a plate's wells that share a lot."""
    wells = [len(plate.wells) for plate in plates]
    role = np.concatenate([plate.wells["role"].to_numpy() for plate in plates])
    lot = np.concatenate([plate.wells["lot"].to_numpy() for plate in plates])
    number = np.repeat(np.arange(len(plates)), wells)
    blank = role == "blank"
    names = sorted({(int(p), str(name)) for p, name, b in zip(number, lot, blank, strict=True) if not b})
    series = [
        -1 if b else names.index((int(p), str(name))) for p, name, b in zip(number, lot, blank, strict=True)
    ]
    signal = np.concatenate([plate.signal for plate in plates])
    substrate = np.concatenate([plate.wells["substrate_um"].to_numpy(float) for plate in plates])
    return CurveBatch(
        time_s=np.repeat(design.time_s[None, :], signal.shape[0], axis=0),
        product_um=np.where(np.isfinite(signal), signal, np.nan) / design.signal_per_um,
        plate=number,
        series=np.array(series),
        is_blank=blank,
        is_enzyme_blank=np.zeros(blank.size, dtype=bool),
        substrate_um=substrate,
        consumable_um=np.where(substrate > 0, substrate, np.nan),
        product_zero_is_blank=np.full(blank.size, zero_is_blank),
    )


def plain_batch(
    time_s: np.ndarray,
    product_um: np.ndarray,
    *,
    blank: Sequence[bool] | None = None,
    substrate_um: Sequence[float] | None = None,
    zero_is_blank: bool = False,
) -> CurveBatch:
    """Curves of one plate without series: each well is judged by its own reads."""
    wells = product_um.shape[0]
    is_blank = np.zeros(wells, dtype=bool) if blank is None else np.array(blank)
    substrate = np.full(wells, 1000.0) if substrate_um is None else np.array(substrate_um, dtype=float)
    return CurveBatch(
        time_s=np.broadcast_to(time_s, product_um.shape).copy(),
        product_um=product_um,
        plate=np.zeros(wells, dtype=int),
        series=np.full(wells, -1),
        is_blank=is_blank,
        is_enzyme_blank=np.zeros(wells, dtype=bool),
        substrate_um=substrate,
        consumable_um=np.where(substrate > 0, substrate, np.nan),
        product_zero_is_blank=np.full(wells, zero_is_blank),
    )
