"""Set the demo up: a site of the invented firm, its inbox filled with one simulated night."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Sequence
from decimal import Decimal
from pathlib import Path

from flows.demo.exports import PlateRead, write_export
from flows.demo.scenario import ExportFile, MapFile, Scenario, design_plate, read_scenario, simulate
from flows.demo.workbook import Cell, workbook
from flows.site.durable import write_durably
from flows.site.layout import create_site, open_site
from flows.site.shipped import shipped

SCENARIO = "fixtures/demo"


def write_demo(root: Path) -> None:
    """Create the demo's site and fill its inbox.

    In a folder that holds the demo already, the same files are dropped again.

    Parameters
    ----------
    root
        Folder of the site.

    Raises
    ------
    SiteError
        If the folder holds another site or other things.
    """
    demo = shipped(SCENARIO)
    site = open_site(root) if _holds_the_demo(root, demo) else create_site(root, demo / "config")
    for name, content in night_files(read_scenario(demo / "scenario.toml")).items():
        write_durably(site.inbox / name, content)


def _holds_the_demo(root: Path, demo: Path) -> bool:
    mine, theirs = demo / "config" / "site.toml", root / "config" / "site.toml"
    return theirs.is_file() and theirs.read_bytes() == mine.read_bytes()


def night_files(scenario: Scenario) -> dict[str, bytes]:
    """Every file of the night, by name: the same scenario gives the same bytes."""
    files = {entry.name: _export(scenario, entry) for entry in scenario.exports}
    return files | {entry.name: _plate_map(scenario, entry) for entry in scenario.maps}


# How many of the map's unit make one umol/L, nmol/L or ng/mL.
_PER_BASE_UNIT = {"umol/L": 1.0, "mmol/L": 1e-3, "nmol/L": 1.0, "pmol/L": 1e3, "ng/mL": 1.0, "ug/mL": 1e-3}


def _export(scenario: Scenario, entry: ExportFile) -> bytes:
    plates = [scenario.plate(plate_id) for plate_id in entry.plates]
    reads = [
        PlateRead(
            plate.plate_id,
            scenario.benches[plate.assay].well_count,
            plate.started_at,
            simulate(scenario, plate.plate_id),
        )
        for plate in plates
    ]
    content = write_export(scenario.dialects[entry.dialect], reads)
    return content if entry.torn_at is None else content[: int(len(content) * entry.torn_at)]


def _plate_map(scenario: Scenario, entry: MapFile) -> bytes:
    head = [
        "plate_id",
        "well",
        "role",
        "lot",
        f"substrate [{entry.substrate_unit}]",
        f"enzyme [{entry.enzyme_unit}]",
        "modulator",
        "modulator [umol/L]",
    ]
    rows: list[list[Cell]] = [[*head, "assay"]]
    by_mass = entry.enzyme_unit.endswith("/mL")
    for plate_id in entry.plates:
        plate = scenario.plate(plate_id)
        for well in design_plate(scenario, plate).wells.to_dict("records"):
            enzyme = well["enzyme_ng_per_ml"] if by_mass else well["enzyme_nm"]
            rows.append(
                [
                    plate_id,
                    well["well"],
                    well["role"],
                    well["lot"] or "",
                    _amount(well["substrate_um"], entry.substrate_unit),
                    _amount(enzyme, entry.enzyme_unit),
                    well["modulator"] or "",
                    _amount(well["modulator_um"], "umol/L"),
                    plate.assay,
                ]
            )
    return workbook([("Plate map", rows)]) if entry.container == "xlsx" else _csv(rows)


def _amount(value: float, unit: str) -> Cell:
    return "" if math.isnan(value) else Decimal(f"{value * _PER_BASE_UNIT[unit]:.6g}")


def _csv(rows: Sequence[Sequence[Cell]]) -> bytes:
    written = io.StringIO()
    csv.writer(written, lineterminator="\n").writerows(rows)
    return written.getvalue().encode("utf-8")
