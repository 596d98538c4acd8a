"""How the signal of one plate read becomes substrate turned over: by absorption, response or standard curve.

Decided once a plate read, before its rates: a plate whose standards or path lengths cannot be used waits,
with the reason. The arithmetic is in models.calibration.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from models.calibration.calibration import Calibration
from models.calibration.path_length import path_from_water_band
from models.calibration.standard_curve import CalibrationRefusal
from models.calibration.standards import standard_wells
from models.errors import HalfsatError
from models.records.assay import Absorption, Assay, StandardCurve, WaterBand

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Conversion:
    """Signal to substrate turned over, for the wells of one plate read.

    Attributes
    ----------
    curve
        Standard curve; None where the signal is in proportion to product.
    signal_per_um
        Signal per umol/L of product by well, positive; one entry named "" where all wells share it.
    sign
        1 where the signal rises with product, -1 where it falls.
    product_per_substrate
        Product that the measurement finds per substrate consumed: stoichiometry times recovery.
    relative_error_shared
        Relative standard error [1] that every well's rate shares.
    shared_by_assay
        Whether that error belongs to the assay, and so to all its plates, or to this plate's own standards.
    standards
        Those standards: well, product_um (known), signal and back_calculated_um; no rows where there are
        none.
    """

    curve: Calibration | None
    signal_per_um: dict[str, float]
    sign: float
    product_per_substrate: float
    relative_error_shared: float
    shared_by_assay: bool
    standards: pd.DataFrame

    def turnover_um(self, wells: Sequence[str], signal: Floats) -> Floats:
        """Substrate turned over [umol/L] up to a constant, of signals with shape (wells, reads)."""
        if self.curve is not None:
            return self.curve.to_product(signal)[0] / self.product_per_substrate
        slopes = np.array(
            [self.signal_per_um.get(well, self.signal_per_um.get("", np.nan)) for well in wells]
        )
        return self.sign * signal / (slopes * self.product_per_substrate)[:, None]

    def readable(self, signal: Floats) -> NDArray[np.bool_]:
        """Whether product can be read from each signal; outside a standard curve's range it cannot."""
        return np.ones(signal.shape, dtype=bool) if self.curve is None else self.curve.in_range(signal)


def plate_conversion(assay: Assay, readings: pd.DataFrame, wells: pd.DataFrame, channel: str) -> Conversion:
    """Decide how a plate read's signal is converted.

    Parameters
    ----------
    assay
        The plate's assay.
    readings
        Readings of all channels, columns of the `readings` table.
    wells
        The plate map's wells.
    channel
        Channel that the assay reads.

    Raises
    ------
    HalfsatError
        If the plate's standards give no usable curve, or the water band was not read.
    """
    curve: Calibration | None = None
    signal_per_um: dict[str, float] = {}
    standards = pd.DataFrame(columns=["well", "product_um", "signal", "back_calculated_um"])
    if assay.standard_curve is not None:
        curve, standards = _curve(
            assay, assay.standard_curve, readings[readings["channel"] == channel], wells
        )
        shared = curve.relative_error_shared
    elif assay.absorption is not None and assay.absorption.water_band is not None:
        signal_per_um = _by_water_band(assay.absorption, assay.absorption.water_band, readings)
        shared = assay.absorption.relative_error_shared
    else:
        proportional = assay.absorption or assay.response
        assert proportional is not None
        signal_per_um = {"": proportional.signal_per_um}
        shared = 0.0 if assay.absorption is None else assay.absorption.relative_error_shared
    return Conversion(
        curve=curve,
        signal_per_um=signal_per_um,
        sign=1.0 if assay.signal.direction == "rises" else -1.0,
        product_per_substrate=assay.product_per_substrate * assay.product_recovery,
        relative_error_shared=shared,
        shared_by_assay=assay.standard_curve is None or assay.standard_curve.points_from == "stated",
        standards=standards,
    )


def _curve(
    assay: Assay, stated: StandardCurve, readings: pd.DataFrame, wells: pd.DataFrame
) -> tuple[Calibration, pd.DataFrame]:
    """The plate's curve, and the standards of its own that it rests on."""
    used, product_um, signal = wells[:0], np.empty(0), np.empty(0)
    if stated.points_from == "stated":
        curve = stated.stated(assay.signal.direction)
    else:
        known = wells[(wells["role"] == "standard") & wells["product_um"].notna()]
        limit = np.inf if assay.signal.linear_limit is None else assay.signal.linear_limit
        usable = readings[(readings["state"] == "ok") & (readings["signal"] <= limit)]
        reads = usable.pivot(index="well", columns="read_number", values="signal").reindex(known["well"])
        signal = standard_wells(reads.to_numpy(dtype=np.float64)).signal
        used, signal = known[np.isfinite(signal)], signal[np.isfinite(signal)]
        product_um = used["product_um"].to_numpy(dtype=np.float64)
        curve = stated.fit(product_um, signal, assay.signal.direction)
    if isinstance(curve, CalibrationRefusal):
        raise HalfsatError(
            f"its standard curve cannot be used: {curve.reason}",
            remedy="mend the standards in the plate map, or the assay's [standard_curve]",
        )
    # The curve keeps its standards in this order.
    order = np.lexsort((signal, product_um))
    columns = {"product_um": product_um[order], "signal": signal[order]}
    back_um = curve.back_calculated_um() if stated.points_from == "plate" else np.empty(0)
    well = used["well"].to_numpy(dtype=object)[order]
    return curve, pd.DataFrame({"well": well, **columns, "back_calculated_um": back_um})


def _by_water_band(absorption: Absorption, band: WaterBand, readings: pd.DataFrame) -> dict[str, float]:
    """Signal per umol/L of product of each well, by its own path length; wells without one are left out."""
    near_infrared = [
        readings[readings["channel"] == channel].pivot(index="well", columns="read_number", values="signal")
        for channel in (band.channel_977, band.channel_900)
    ]
    for channel, read in zip((band.channel_977, band.channel_900), near_infrared, strict=True):
        if read.empty:
            raise HalfsatError(
                f"its export has no channel '{channel}' for the path length",
                remedy="read the water band with the plate, or state path_length_cm in the assay",
            )
    at_977, at_900 = near_infrared[0].align(near_infrared[1], join="inner")
    paths = path_from_water_band(at_977.to_numpy(dtype=float), at_900.to_numpy(dtype=float), band.per_cm)
    return {
        str(well): absorption.signal_per_um_per_cm * float(path)
        for well, path in zip(at_977.index, paths.path_cm, strict=True)
        if np.isfinite(path)
    }
