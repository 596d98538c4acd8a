"""The demo's scenario as records: lots with their true constants, plates with their faults, files.

Turns the scenario file into designs and simulated plates; how they are written is in `flows.demo.exports`.
"""

from __future__ import annotations

import hashlib
import math
import tomllib
import typing
from dataclasses import replace
from datetime import datetime
from pathlib import Path
from typing import Annotated, Literal

import numpy as np
import pandas as pd
from pydantic import Field, StringConstraints, TypeAdapter, ValidationError

from models.errors import ConfigurationError, UnknownName
from models.records.record import Record
from models.simulation import Design, LotTruth, Noise, SimulatedPlate, level_layout, simulate_plate
from models.simulation.faults import Fault

_FAULTS: dict[str, TypeAdapter[Fault]] = {kind.name: TypeAdapter(kind) for kind in typing.get_args(Fault)}


class Bench(Record):
    """How the plates of one assay are prepared and read."""

    well_count: Literal[96, 384]
    levels_um: tuple[float, ...] = Field(min_length=4)
    replicates: int = Field(ge=1)
    blanks: int = Field(ge=1)
    enzyme_nm: float | None = None
    enzyme_ng_per_ml: float | None = None
    signal_per_um: float
    baseline_signal: float
    overflow_above: float
    reagent_um: float | None = None
    read_count: int = Field(ge=5)
    interval_s: float = Field(gt=0)
    temperature_c: float
    signal_sd: float = Field(ge=0)
    baseline_sd: float = Field(ge=0)
    pipetting_cv: float = Field(ge=0)


class Lot(Record):
    """One lot: which assay it is for and the constants it truly has."""

    assay: str
    law: Literal["michaelis_menten", "hill"] = "michaelis_menten"
    k_um: float = Field(gt=0)
    kcat_per_s: float = Field(gt=0)
    hill_n: float = Field(default=1.0, gt=0)
    molar_mass_g_per_mol: float | None = None
    k_ic_um: dict[str, float] = Field(default_factory=dict)
    """Constants of competitive inhibitors by their name [umol/L]."""

    def truth(self, modulator: str | None = None, modulator_um: float = 0.0) -> LotTruth:
        """The constants as the simulation wants them, with a competitive inhibitor at some level."""
        own = LotTruth(**self.model_dump(exclude={"assay", "k_ic_um"}))
        if modulator is None or modulator_um == 0:
            return own
        return replace(own, k_um=own.k_um * (1.0 + modulator_um / self.k_ic_um[modulator]))


class Plate(Record):
    """One plate of the night; its first lot is the reference."""

    plate_id: str
    assay: str
    started_at: datetime
    lots: tuple[str, ...] = Field(min_length=1)
    enzyme_factors: tuple[float, ...] = (1.0,)
    """Enzyme levels of every lot but the reference, over the bench's."""
    modulator: str | None = None
    modulator_levels_um: tuple[float, ...] = (0.0,)
    """Levels of the modulator with every lot but the reference."""
    faults: tuple[dict[str, typing.Any], ...] = ()


class Dialect(Record):
    """How one reader of the firm writes its files."""

    shape: Literal["long", "wide", "wells_by_rows", "grids"]
    container: Literal["text", "xlsx"] = "text"
    encoding: str = "utf-8"
    # The base record strips blanks from text, and a tab is one.
    delimiter: Annotated[str, StringConstraints(strip_whitespace=False, min_length=1)] = ","
    decimal: Literal[".", ","] = "."
    decimals: int = Field(ge=0, le=6)
    overflow: str
    missing: str = ""
    wells: Literal["plain", "padded", "numbered"] = "plain"
    time: Literal["seconds", "minutes", "milliseconds", "clock", "timestamp", "none"]
    channel: str | None = None
    second_channel: str | None = None
    temperature: bool = False
    preamble: tuple[str, ...] = ()
    trailer: tuple[str, ...] = ()


class ExportFile(Record):
    """One file of the night and the plates in it."""

    name: str
    dialect: str
    plates: tuple[str, ...] = Field(min_length=1)
    torn_at: float | None = Field(default=None, gt=0, lt=1)
    """Share of the file's bytes after which the copy broke off."""


class MapFile(Record):
    """One plate map file and the plates that it describes."""

    name: str
    plates: tuple[str, ...] = Field(min_length=1)
    container: Literal["text", "xlsx"] = "text"
    substrate_unit: Literal["umol/L", "mmol/L"] = "umol/L"
    enzyme_unit: Literal["nmol/L", "pmol/L", "ng/mL", "ug/mL"] = "nmol/L"


class Scenario(Record):
    """The whole night."""

    firm: str
    site: str
    seed: int
    benches: dict[str, Bench]
    lots: dict[str, Lot]
    plates: tuple[Plate, ...]
    dialects: dict[str, Dialect]
    exports: tuple[ExportFile, ...]
    maps: tuple[MapFile, ...]

    def plate(self, plate_id: str) -> Plate:
        """The plate of this id.

        Raises
        ------
        UnknownName
            If there is none.
        """
        for plate in self.plates:
            if plate.plate_id == plate_id:
                return plate
        raise UnknownName(f"the scenario has no plate '{plate_id}'")


def read_scenario(path: Path) -> Scenario:
    """Read a scenario file.

    Raises
    ------
    ConfigurationError
        If a key is missing, unknown or out of range.
    """
    try:
        return Scenario.model_validate(tomllib.loads(path.read_text(encoding="utf-8")))
    except (ValidationError, tomllib.TOMLDecodeError) as error:
        raise ConfigurationError(str(error), where=path.name) from error


def design_plate(scenario: Scenario, plate: Plate) -> Design:
    """Design of one plate: a level a row, the reference first, then the lots, then blanks."""
    bench = scenario.benches[plate.assay]
    enzyme = {"enzyme_nm": bench.enzyme_nm, "enzyme_ng_per_ml": bench.enzyme_ng_per_ml}
    reference: dict[str, object] = {"role": "reference", "lot": plate.lots[0], **enzyme}
    samples: list[dict[str, object]] = [
        {
            "role": "sample",
            "lot": lot,
            **{name: None if level is None else level * factor for name, level in enzyme.items()},
            "modulator": plate.modulator if level_um > 0 else None,
            "modulator_um": level_um if level_um > 0 else None,
        }
        for lot in plate.lots[1:]
        for factor in plate.enzyme_factors
        for level_um in plate.modulator_levels_um
    ]
    columns = [column for column in (reference, *samples) for _ in range(bench.replicates)]
    columns += [{"role": "blank"} for _ in range(bench.blanks)]
    return Design(
        well_count=bench.well_count,
        wells=level_layout(bench.well_count, bench.levels_um, columns),
        time_s=np.arange(bench.read_count, dtype=np.float64) * bench.interval_s,
        signal_per_um=bench.signal_per_um,
        baseline_signal=bench.baseline_signal,
        overflow_above=bench.overflow_above,
        reagent_um=math.inf if bench.reagent_um is None else bench.reagent_um,
        temperature_c=bench.temperature_c,
    )


def simulate(scenario: Scenario, plate_id: str) -> SimulatedPlate:
    """Simulate one plate of the night.

    Each plate draws from its own stream, made of the scenario's seed and the plate's id, so that adding a
    plate changes no other.
    """
    plate = scenario.plate(plate_id)
    bench = scenario.benches[plate.assay]
    own = int.from_bytes(hashlib.sha256(plate_id.encode()).digest()[:8], "big")
    design = design_plate(scenario, plate)
    # The simulation knows no modulators: a lot with some of one is another lot to it.
    levels = design.wells["modulator_um"].fillna(0.0)
    names = [
        lot if level == 0 or lot is None else f"{lot} with {level:g}"
        for lot, level in zip(design.wells["lot"], levels, strict=True)
    ]
    truth = {
        name: scenario.lots[lot].truth(plate.modulator, level)
        for name, lot, level in zip(names, design.wells["lot"], levels, strict=True)
        if lot is not None
    }
    simulated = simulate_plate(
        replace(design, wells=design.wells.assign(lot=pd.Series(names, dtype=object))),
        truth,
        Noise(bench.signal_sd, bench.pipetting_cv, bench.pipetting_cv, bench.baseline_sd),
        [_fault(entry) for entry in plate.faults],
        np.random.default_rng([scenario.seed, own]),
    )
    return replace(simulated, wells=design.wells)


def _fault(entry: dict[str, typing.Any]) -> Fault:
    sizes = dict(entry)
    kind = sizes.pop("kind", None)
    if kind not in _FAULTS:
        raise UnknownName(f"'{kind}' is no fault", remedy=f"use one of {', '.join(sorted(_FAULTS))}")
    return _FAULTS[kind].validate_python(sizes)
