"""A tiny site whose every row is made by hand and fits the others: two plates, two lots, two passes.

Invented lots QX-7 (sample) and REF-1 (reference), four wells each and one blank. Exact Michaelis-Menten
rates with Km 50 umol/L and Vmax 0.2 umol/L/s stand where fits would stand: here rows are tested, not
numbers. On the second plate well A4 is held. Files go through the real pull, lake, ledger, warehouse and
publication.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from pathlib import Path

import pandas as pd

from flows import ledger
from flows.lake import write_rows
from flows.site.layout import Site, create_site
from flows.site.recipes import Recipe, keep_recipe
from flows.stages.load import load_results
from flows.stages.publish import publish_results
from flows.stages.pull import PulledFile, pull
from models.identity import result_id
from models.records.assay import Assay
from models.records.export_profile import ExportProfile
from models.tables import TABLES, Table
from tests.flows.tiny_fits import add_series
from tests.flows.tiny_plates import (
    FIRST_NIGHT,
    HELD,
    INTERVAL_S,
    KM_UM,
    LOTS,
    PLATES,
    READS,
    SIGNAL_PER_UM,
    all_wells,
    rate_um_per_s,
    signal,
    substrate_um,
)


@dataclass(frozen=True)
class Settings:
    """What pulling asks of a site's settings."""

    inbox: str = "inbox"
    settle_s: float = 0.0


@dataclass
class TinySite:
    """The site and the ids of what is in it, by plate and lot."""

    site: Site
    recipe: Recipe
    exports: dict[str, bytes] = field(default_factory=dict)
    export_ids: dict[str, str] = field(default_factory=dict)
    map_id: str = ""
    plate_read_ids: dict[str, str] = field(default_factory=dict)
    analysis_ids: dict[str, str] = field(default_factory=dict)
    series_ids: dict[tuple[str, str], str] = field(default_factory=dict)
    grid_ids: dict[tuple[str, str], str] = field(default_factory=dict)
    fit_ids: dict[tuple[str, str], str] = field(default_factory=dict)
    estimate_ids: dict[tuple[str, str], str] = field(default_factory=dict)
    lot_value_ids: dict[tuple[str, str], str] = field(default_factory=dict)


def rows(table: Table, given: Sequence[Mapping[str, object]]) -> pd.DataFrame:
    """Rows of a table; columns that may be unknown and are not given are None."""
    unknown = {c.name: None for c in table.columns if c.nullable}
    return pd.DataFrame([{**unknown, **row} for row in given], columns=table.column_names, dtype=object)


def config_source(folder: Path) -> Path:
    """A configuration that is there, and no more."""
    folder.mkdir(parents=True)
    (folder / "site.toml").write_text('name = "Tiny"\n')
    return folder


def empty_site(root: Path) -> Site:
    """A new site without a file."""
    return create_site(root / "site", config_source(root / "config-source"))


def tiny_recipe(depletion_limit: float = 0.1) -> Recipe:
    assay = Assay.model_validate(
        {
            "enzyme": "tiny oxidase",
            "substrate": "tiny substrate",
            "product": "tiny product",
            "signal": {"kind": "absorbance"},
            "response": {"signal_per_um": SIGNAL_PER_UM, "source": "invented"},
        }
    )
    profile = ExportProfile.model_validate(
        {
            "shape": "wide",
            "detect": {"file_name": ["TP-*.csv"]},
            "plate": {"id_in_file_name": r"(?P<plate_id>TP-\d)"},
            "time": {"notation": "s"},
            "columns": {"time": "time"},
        }
    )
    limits: dict[str, dict[str, bool | int | float]] = {"substrate_depletion": {"limit": depletion_limit}}
    return Recipe("tiny", assay, "tiny_wide", profile, limits, "0.0+test")


def tiny_site(root: Path) -> TinySite:
    """Make the site: two nights, one plate each, published after each."""
    made = TinySite(empty_site(root), tiny_recipe())
    ledger.append(made.site, "site_created", {"name": "Tiny"}, at=FIRST_NIGHT - timedelta(days=1))
    (made.site.inbox / "plates.csv").write_bytes(b"plate_id,well,role,lot\nTP-1,A1,sample,QX-7\n")
    for night, plate in enumerate(PLATES):
        at = FIRST_NIGHT + timedelta(days=7 * night, hours=8)
        (made.site.inbox / f"{plate}.csv").write_bytes(export_text(plate))
        run_night(made, plate, f"pass-{night + 1}", at)
    return made


def run_night(made: TinySite, plate: str, pass_id: str, at: datetime) -> None:
    """One pass by hand: pull, stage, load, lots, publish."""
    ledger.append(made.site, "pass_started", {"pass_id": pass_id}, at=at)
    pulled = pull(made.site, Settings(), at)
    if keep_recipe(made.site, made.recipe):
        ledger.append(made.site, "recipe_kept", {"recipe_id": made.recipe.recipe_id}, at=at)
    load_results(made.site, pass_id, staged_tables(made, pulled, plate, pass_id), at)
    load_results(made.site, pass_id, analysed_tables(made, plate, pass_id, at), at)
    load_results(made.site, pass_id, lot_tables(made, pass_id, at), at)
    finished: dict[str, object] = {
        "pass_id": pass_id,
        "started_at": at,
        "finished_at": at + timedelta(minutes=3),
        "code_version": made.recipe.code_version,
        "export_count": 1,
        "map_count": sum(file.file_name == "plates.csv" for file in pulled),
        "quarantined_count": 0,
        "analysis_count": 1,
    }
    load_results(made.site, pass_id, {"passes": rows(_table("passes"), [finished])}, at)
    ledger.append(made.site, "pass_finished", {"pass_id": pass_id}, at=at + timedelta(minutes=3))
    publish_results(made.site, at + timedelta(minutes=3))


def export_text(plate: str) -> bytes:
    """A wide export: a line a time, a field a well."""
    wells = all_wells()
    lines = [",".join(["time", *wells])]
    for read in range(READS):
        time_s = read * INTERVAL_S
        lines.append(",".join([f"{time_s:g}", *(repr(signal(plate, well, time_s)) for well in wells)]))
    return ("\n".join(lines) + "\n").encode()


def staged_tables(
    made: TinySite, pulled: Sequence[PulledFile], plate: str, pass_id: str
) -> dict[str, pd.DataFrame]:
    """What staging loads: files, the plate map, the plate read; its readings go into the lake."""
    tables: dict[str, pd.DataFrame] = {}
    files: list[dict[str, object]] = []
    for file in pulled:
        is_map = file.file_name == "plates.csv"
        files.append(
            {
                "file_id": file.file_id,
                "kind": "plate_map" if is_map else "export",
                "file_name": file.file_name,
                "byte_count": len(file.content),
                "received_at": file.received_at,
                "profile": None if is_map else "tiny_wide",
                "pass_id": pass_id,
            }
        )
        if is_map:
            made.map_id = file.file_id
            maps = [
                {
                    "map_id": file.file_id,
                    "plate_id": each,
                    "mapped_well_count": 9,
                    "received_at": file.received_at,
                }
                for each in PLATES
            ]
            tables["plate_maps"] = rows(_table("plate_maps"), maps)
        else:
            made.exports[plate], made.export_ids[plate] = file.content, file.file_id
    tables["files"] = rows(_table("files"), files)
    plate_read_id = result_id("plate_read", made.export_ids[plate], 1)
    made.plate_read_ids[plate] = plate_read_id
    read = {
        "plate_read_id": plate_read_id,
        "export_id": made.export_ids[plate],
        "place_in_export": 1,
        "plate_id": plate,
        "plate_format": 96,
        "started_at": FIRST_NIGHT + timedelta(days=7 * PLATES.index(plate)) if plate == "TP-1" else None,
        "well_count": 9,
        "read_count": READS,
        "channels": "signal",
        "duration_s": (READS - 1) * INTERVAL_S,
    }
    tables["plate_reads"] = rows(_table("plate_reads"), [read])
    write_rows(made.site, "readings", plate_read_id, readings(plate, plate_read_id))
    return tables


def readings(plate: str, plate_read_id: str) -> pd.DataFrame:
    given = [
        {
            "plate_read_id": plate_read_id,
            "channel": "signal",
            "well": well,
            "read_number": read + 1,
            "time_s": read * INTERVAL_S,
            "signal": signal(plate, well, read * INTERVAL_S),
            "state": "ok",
            "source_row": read + 2,
            "source_column": place + 2,
        }
        for place, well in enumerate(all_wells())
        for read in range(READS)
    ]
    return rows(_table("readings"), given)


def analysed_tables(
    made: TinySite, plate: str, pass_id: str, at: datetime, *, revision: int = 1, recipe: Recipe | None = None
) -> dict[str, pd.DataFrame]:
    """What fitting loads: recipe, analysis, wells, rates, findings, series, fits, estimates, one gate run."""
    recipe = recipe or made.recipe
    analysis_id = result_id("analysis", made.plate_read_ids[plate], made.map_id, recipe.recipe_id, [])
    made.analysis_ids[plate] = analysis_id
    given: dict[str, list[dict[str, object]]] = {name: [] for name in _ANALYSED}
    given["recipes"].append(dict(recipe.row()))
    given["analyses"].append(
        {
            "analysis_id": analysis_id,
            "plate_read_id": made.plate_read_ids[plate],
            "map_id": made.map_id,
            "assay": "tiny",
            "recipe_id": recipe.recipe_id,
            "pass_id": pass_id,
            "revision": revision,
            "computed_at": at,
            "standing": "held" if plate == HELD[0] else "clear",
        }
    )
    given["gate_runs"].append(
        {
            "gate_run_id": result_id("gate_run", analysis_id),
            "pass_id": pass_id,
            "recipe_id": recipe.recipe_id,
            "suite": "wells.well",
            "expectation_count": 1,
            "row_count": 9,
            "success": plate != HELD[0],
            "file": "lake/gate_documents/none.json",
        }
    )
    given["plate_statistics"].append(
        {"analysis_id": analysis_id, "statistic": "z_prime", "statistic_value": 0.8, "well_count": 9}
    )
    for well in all_wells():
        _add_well(made, given, plate, analysis_id, well)
    for row in LOTS:
        add_series(made, given, plate, analysis_id, row)
    if plate == HELD[0]:
        given["findings"] += [
            _finding(
                analysis_id,
                "substrate_depletion",
                "well",
                HELD[1],
                0.21,
                "21 % of the substrate was consumed.",
            ),
            _finding(analysis_id, "blank_drift", "plate_read", None, 0.02, "The blanks drift."),
        ]
    return {name: rows(_table(name), each) for name, each in given.items()}


def _add_well(
    made: TinySite, given: dict[str, list[dict[str, object]]], plate: str, analysis_id: str, well: str
) -> None:
    lot, role = LOTS.get(well[0], (None, "blank"))
    if lot is not None:
        made.series_ids[plate, lot] = result_id("series", analysis_id, lot)
    level = substrate_um(well)
    given["wells"].append(
        {
            "analysis_id": analysis_id,
            "well": well,
            "row_number": ord(well[0]) - 64,
            "column_number": int(well[1:]),
            "role": role,
            "lot": lot,
            "substrate_um": level,
            "enzyme_nm": 5.0 if lot else None,
            "series_id": made.series_ids[plate, lot] if lot else None,
            "standing": "held" if (plate, well) == HELD else "clear",
        }
    )
    given["rates"].append(
        {
            "analysis_id": analysis_id,
            "well": well,
            "v0_um_per_s": rate_um_per_s(level),
            "v0_se_um_per_s": 0.0012,
            "blank_source": "plate",
            "mean_substrate_um": level,
            "window_first_read": 1,
            "window_last_read": 4,
            "window_start_s": 0.0,
            "window_end_s": 3 * INTERVAL_S,
            "window_point_count": 4,
            "shape": "straight",
            "overflow_count": 0,
            "missing_count": 0,
        }
    )


def lot_tables(made: TinySite, pass_id: str, at: datetime) -> dict[str, pd.DataFrame]:
    """Lot values over all plates so far, km only."""
    plates = [plate for plate in PLATES if plate in made.analysis_ids]
    values, sources = [], []
    for lot, role in LOTS.values():
        estimate_ids = sorted(made.estimate_ids[plate, lot] for plate in plates)
        lot_value_id = result_id("lot_value", "tiny", lot, "km", estimate_ids)
        made.lot_value_ids[pass_id, lot] = lot_value_id
        km = KM_UM + sum(2.0 * PLATES.index(plate) for plate in plates) / len(plates)
        values.append(
            {
                "lot_value_id": lot_value_id,
                "pass_id": pass_id,
                "assay": "tiny",
                "lot": lot,
                "role": role,
                "constant": "km",
                "value": km,
                "standard_error": 2.0,
                "low": km - 4,
                "high": km + 4,
                "unit": "umol/L",
                "between_plate_sd": 1.0 if len(plates) > 1 else None,
                "plate_read_count": len(plates),
                "series_count": len(plates),
                "held_series_count": 0,
                "measured_at": at - timedelta(hours=8),
                "standing": "clear",
                "reason": None,
            }
        )
        sources += [{"lot_value_id": lot_value_id, "estimate_id": each} for each in estimate_ids]
    return {
        "lot_values": rows(_table("lot_values"), values),
        "lot_value_sources": rows(_table("lot_value_sources"), sources),
    }


def _finding(
    analysis_id: str, gate: str, subject: str, well: str | None, measured: float, sentence: str
) -> dict[str, object]:
    return {
        "finding_id": result_id("finding", analysis_id, gate, well),
        "analysis_id": analysis_id,
        "gate": gate,
        "subject": subject,
        "well": well,
        "outcome": "breach",
        "severity": "hold",
        "measured": measured,
        "limit_value": 0.1,
        "unit": "1",
        "sentence": sentence,
    }


_ANALYSED = (
    "recipes",
    "analyses",
    "wells",
    "rates",
    "findings",
    "series",
    "grids",
    "fits",
    "estimates",
    "fit_points",
    "correlations",
    "comparisons",
    "shifts",
    "suggestions",
    "plate_statistics",
    "gate_runs",
)


def _table(name: str) -> Table:
    return next(each for each in TABLES if each.name == name)
