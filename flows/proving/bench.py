"""What plates of an assay look like: layout, true constants, noise and schedule, from the site's own plates.

Where a site has none yet, a common design stands in, and the bench says so.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import duckdb
import numpy as np
import pandas as pd

from checks.gates import Limits
from flows.site.layout import Site
from flows.site.recipes import Recipe
from flows.stages.conversion import plate_conversion
from flows.stages.work import PlateWork
from flows.warehouse.reader import open_published
from models.errors import HalfsatError
from models.records.assay import Assay
from models.records.export_profile import ExportProfile
from models.simulation import MAP_COLUMNS, Design, LotTruth, Noise, SimulatedPlate, triplicate_design
from models.tables import READINGS
from models.tables.keys import ONLY_CHANNEL

S_PER_MIN = 60.0
UG_PER_MG_AND_NM = 1e3
ANY_MOLAR_MASS = 50_000.0
"""Where enzyme is known by mass alone: any molar mass gives the same rates."""
SIMULATED_READS, SIMULATED_INTERVAL_S = 61, 10.0
COMMON_CV = 0.02
"""2 % for each of two dispensing steps: common practice, no source."""
READ_NOISE_SHARE = 0.001
"""Noise of a read over the signal that the lowest level makes in full, where the site has none to measure."""
LINE_IN_REACH = 3.0
"""A level this many times K tells the enzyme's share of the scatter, one below K the substrate's as well."""


@dataclass(frozen=True)
class ProvingBench:
    """An assay as it is run.

    Attributes
    ----------
    assay_name, assay, profile, limits
        What a recipe is made of.
    design
        Layout, schedule and signal.
    truth
        Constants by lot.
    noise
        Scatter of reads and dispensing.
    sources
        Where each of these comes from, as one reads it.
    """

    assay_name: str
    assay: Assay
    profile: ExportProfile
    limits: Limits
    design: Design
    truth: dict[str, LotTruth]
    noise: Noise
    sources: tuple[tuple[str, str], ...]

    def work(self, number: int, plate: SimulatedPlate) -> PlateWork:
        """A simulated plate as the line takes it."""
        wells, count = plate.wells["well"].tolist(), len(plate.time_s)
        signal = plate.signal.ravel()
        readings = READINGS.empty().reindex(range(len(wells) * count))
        readings = readings.assign(
            well=np.repeat(np.array(wells, dtype=object), count),
            channel=ONLY_CHANNEL,
            read_number=np.tile(np.arange(1, count + 1), len(wells)),
            time_s=np.tile(plate.time_s, len(wells)),
            signal=np.where(np.isfinite(signal), signal, np.nan),
            state=np.select([np.isposinf(signal), np.isnan(signal)], ["overflow", "missing"], "ok"),
            temperature_c=np.tile(plate.temperature_c, len(wells)),
        )
        recipe = Recipe(self.assay_name, self.assay, "simulated", self.profile, self.limits, "simulated")
        conversion = plate_conversion(self.assay, readings, plate.wells, ONLY_CHANNEL)
        name = f"simulated {number}"
        return PlateWork(name, name, "simulated", recipe, readings, plate.wells, conversion)


def common_bench(
    assay_name: str, assay: Assay, profile: ExportProfile, limits: Limits, *, noise: Noise | None = None
) -> ProvingBench:
    """A bench for an assay that has no plate yet: triplicates of two lots from 0.125 to 12 K.

    Raises
    ------
    HalfsatError
        If the assay reads its conversion from the plate itself, which this design has no wells for.
    """
    per_um = _signal_per_um(assay)
    schedule = assay.schedule
    design = triplicate_design(
        lots=("reference", "lot"),
        read_count=schedule.read_count or SIMULATED_READS,
        interval_s=schedule.interval_s or SIMULATED_INTERVAL_S,
        signal_per_um=per_um,
    )
    lot = LotTruth(k_um=80.0, kcat_per_s=50.0)
    lowest_um = float(design.wells["substrate_um"].min())
    stated = noise or Noise(abs(per_um) * lowest_um * READ_NOISE_SHARE, COMMON_CV, COMMON_CV)
    return ProvingBench(
        assay_name,
        assay,
        profile,
        limits,
        _with_signal(design, assay),
        {"reference": lot, "lot": lot},
        stated,
        (
            ("layout", "triplicates of two lots, 8 levels from 0.125 to 12 K: no plate is known yet"),
            ("constants", "K 80 µM, kcat 50 /s: invented"),
            ("noise", "2 % of each dispensing step, reads at 0.1 % of the lowest level's signal: common"),
        ),
    )


def site_bench(
    site: Site, assay_name: str, assay: Assay, profile: ExportProfile, limits: Limits
) -> ProvingBench:
    """A bench from the latest plate read of the assay that the site has analysed.

    Raises
    ------
    SiteError
        If the site has no published results.
    HalfsatError
        If the assay's conversion cannot be simulated.
    """
    with open_published(site) as connection:
        plate = connection.execute(
            "SELECT a.analysis_id, a.plate_read_id, p.plate_id, p.plate_format, p.read_count, p.duration_s "
            "FROM current_analyses a JOIN plate_reads p USING (plate_read_id) "
            "WHERE a.assay = $1 AND NOT EXISTS (FROM wells w WHERE w.analysis_id = a.analysis_id "
            "AND coalesce(w.modulator_um, 0) > 0) ORDER BY a.measured_at DESC, a.plate_read_id LIMIT 1",
            [assay_name],
        ).fetchone()
        if plate is None:
            return common_bench(assay_name, assay, profile, limits)
        analysis_id, plate_read_id, plate_id, plate_format, read_count, duration_s = plate
        wells = _wells(connection, str(analysis_id))
        truth, from_lots = _truth(connection, assay_name, assay, wells)
        noise, from_plates = _noise(connection, assay_name, str(plate_read_id))
    per_um = _signal_per_um(assay)
    design = Design(
        int(plate_format),
        wells.drop(columns="kept"),
        np.linspace(0.0, float(duration_s), int(read_count)),
        signal_per_um=per_um,
    )
    return ProvingBench(
        assay_name,
        assay,
        profile,
        limits,
        _with_signal(design, assay),
        truth,
        noise,
        (
            ("layout", f"plate {plate_id}, {len(wells)} wells"),
            ("constants", from_lots),
            ("noise", from_plates),
        ),
    )


def _signal_per_um(assay: Assay) -> float:
    if assay.standard_curve is not None:
        raise HalfsatError(
            "an assay with a standard curve cannot be proved yet: its signal is not in proportion to product",
            remedy="prove a copy of the assay that states [response] with the slope of its standards",
        )
    sign = 1.0 if assay.signal.direction == "rises" else -1.0
    per_product = assay.product_per_substrate * assay.product_recovery
    if assay.response is not None:
        return sign * assay.response.signal_per_um * per_product
    assert assay.absorption is not None
    if assay.absorption.water_band is not None:
        raise HalfsatError(
            "an assay whose path length comes from the water band cannot be proved yet",
            remedy="prove a copy of the assay that states path_length_cm",
        )
    return sign * assay.absorption.signal_per_um * per_product


def _with_signal(design: Design, assay: Assay) -> Design:
    """The design with the reagent that runs out, the detector's end, and a baseline with room below."""
    highest_um = float(design.wells["substrate_um"].max())
    reagent_um = assay.consumable_um(1e12)
    falls_by = max(0.0, -design.signal_per_um * min(highest_um, reagent_um))
    limit = assay.signal.linear_limit
    return replace(
        design,
        baseline_signal=falls_by,
        overflow_above=np.inf if limit is None else max(1.5 * limit, 1.5 * falls_by),
        reagent_um=reagent_um if reagent_um < 1e12 else np.inf,
        temperature_c=assay.conditions.temperature_c or design.temperature_c,
    )


def _wells(connection: duckdb.DuckDBPyConnection, analysis_id: str) -> pd.DataFrame:
    names = ", ".join(MAP_COLUMNS)
    wells: pd.DataFrame = connection.execute(
        f"SELECT {names}, role <> 'empty' AS kept FROM wells WHERE analysis_id = $1 AND role <> 'empty' "
        "ORDER BY row_number, column_number",
        [analysis_id],
    ).df()
    for name in ("well", "role", "lot", "modulator"):
        wells[name] = wells[name].astype(object).where(wells[name].notna(), None)
    return wells


def _truth(
    connection: duckdb.DuckDBPyConnection, assay_name: str, assay: Assay, wells: pd.DataFrame
) -> tuple[dict[str, LotTruth], str]:
    """Constants of the lots on the layout as the site knows them."""
    found = connection.execute(
        "SELECT lot, constant, value FROM lot_latest WHERE assay = $1 AND modulator IS NULL", [assay_name]
    ).df()
    by_lot = {
        str(lot): dict(zip(rows["constant"], rows["value"], strict=True))
        for lot, rows in found.groupby("lot", sort=True)
    }
    truth: dict[str, LotTruth] = {}
    law: Literal["michaelis_menten", "hill"]
    for lot in sorted(set(wells["lot"].dropna())):
        constants = by_lot.get(str(lot)) or next(iter(by_lot.values()), {})
        k_um = constants.get("km", constants.get("k_half"))
        mass = assay.molar_mass_g_per_mol or ANY_MOLAR_MASS
        kcat = constants.get("kcat")
        if kcat is None and "specific_activity" in constants:
            # umol/min/mg over g/mol: 1 U/mg of 60,000 g/mol turns over once a second.
            kcat = constants["specific_activity"] * mass / (S_PER_MIN * UG_PER_MG_AND_NM)
        if k_um is None or kcat is None:
            raise HalfsatError(
                f"lot {lot} of assay {assay_name} has no constants yet, and no other lot has any",
                remedy="run a pass with plates of this assay first: halfsat overnight",
            )
        law = "hill" if "hill_n" in constants else "michaelis_menten"
        truth[str(lot)] = LotTruth(
            float(k_um), float(kcat), law, float(constants.get("hill_n", 1.0)), molar_mass_g_per_mol=mass
        )
    return truth, f"{len(truth)} lots as they stand now"


def _noise(connection: duckdb.DuckDBPyConnection, assay_name: str, plate_read_id: str) -> tuple[Noise, str]:
    """Noise of reads from a plate's own curves, scatter of dispensing from how rates lie off their fits."""
    reads = connection.execute(
        "SELECT well, read_number, signal FROM reading WHERE plate_read_id = $1 AND state = 'ok' "
        "ORDER BY channel, well, read_number",
        [plate_read_id],
    ).df()
    curves = reads.pivot_table(index="well", columns="read_number", values="signal").to_numpy(dtype=float)
    bends = np.diff(curves, n=2, axis=1)
    # The median of a normal variate's square is 0.455; a second difference has 6 times a read's variance.
    signal_sd = float(np.sqrt(np.nanmedian(bends**2) / 0.455 / 6.0))
    points = connection.execute(
        "SELECT (p.v_um_per_s - p.fitted_um_per_s) / p.fitted_um_per_s AS off, "
        "p.substrate_um / e.value AS level, "
        "r.v0_se_um_per_s / p.fitted_um_per_s AS own, p.analysis_id "
        "FROM fit_points p JOIN fits f USING (fit_id) "
        "JOIN current_analyses a ON a.analysis_id = p.analysis_id "
        "JOIN rates r ON r.analysis_id = p.analysis_id AND r.well = p.well "
        "JOIN estimates e ON e.fit_id = p.fit_id AND e.constant IN ('km', 'k_half') "
        "WHERE a.assay = $1 AND f.wells = 'clear' AND f.series_id IS NOT NULL AND p.fitted_um_per_s > 0",
        [assay_name],
    ).df()
    high, low = points["level"] > LINE_IN_REACH, points["level"] < 1.0
    enzyme = _excess(points[high])
    substrate = max(_excess(points[low]) ** 2 - enzyme**2, 0.0) ** 0.5
    noise = Noise(signal_sd, enzyme, substrate)
    plates = points["analysis_id"].nunique()
    return noise, (
        f"reads {signal_sd:.2g} of signal, enzyme {enzyme * 100:.1f} %, substrate {substrate * 100:.1f} %: "
        f"from {plates} plate reads"
    )


def _excess(points: pd.DataFrame) -> float:
    """Relative scatter beyond the rates' own errors, by medians."""
    if len(points) < 8:
        return COMMON_CV
    square = float(np.median(points["off"] ** 2)) / 0.455
    return float(np.sqrt(max(square - float(np.median(points["own"] ** 2)), 0.0)))
