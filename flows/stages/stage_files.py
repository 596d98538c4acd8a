"""Turn pulled files into plate maps and staged readings, and put what cannot be read into quarantine.

A file that is refused never stops the others. Readings that pass the structure suite are written to the lake,
one file a plate read.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from itertools import islice

import pandas as pd

from checks.assess import GateRun
from checks.structure import StructureReport, check_structure
from flows.lake import write_rows
from flows.site.archive import quarantine
from flows.site.configuration import Configuration
from flows.site.layout import Site
from flows.stages.gate_runs import structure_run
from flows.stages.kept_profiles import keep_profile
from flows.stages.pull import PulledFile
from flows.stages.read import (
    PlateMap,
    StagedRead,
    choose_profile,
    is_plate_map,
    read_export,
    read_plate_map,
)
from flows.stages.recorded import PROFILE_ID
from models.errors import HalfsatError
from models.identity import result_id
from models.records.export_profile import ExportProfile
from models.tables import READINGS

EXPORTS_A_CHUNK = 40


@dataclass
class StagedFiles:
    """Rows that staging adds to the warehouse, and the structure suite's runs.

    Attributes
    ----------
    files, plate_maps, plate_reads
        Rows of the tables of the same names; `files` without its pass, and with the id of the kept profile
        that read an export (PROFILE_ID), which goes into the ledger.
    runs
        The structure suite's runs, one a chunk of exports.
    """

    files: list[dict[str, object]] = field(default_factory=list)
    plate_maps: list[dict[str, object]] = field(default_factory=list)
    plate_reads: list[dict[str, object]] = field(default_factory=list)
    runs: list[GateRun] = field(default_factory=list)

    def count(self, kind: str) -> int:
        """Files of this kind: export, plate_map or quarantined."""
        return sum(row["kind"] == kind for row in self.files)


@dataclass(frozen=True)
class ExportRead:
    """An export, the profile that read it, and its plate reads by id."""

    file: PulledFile
    profile: str
    kept_profile: str
    plates: dict[str, StagedRead]


def stage_files(site: Site, configuration: Configuration, pulled: Sequence[PulledFile]) -> StagedFiles:
    """Stage every pulled file: map, export, or quarantine.

    Parameters
    ----------
    site
        Where lake and quarantine are, and where the profiles used are kept.
    configuration
        The site's profiles.
    pulled
        New files with their bytes, already in the raw archive.
    """
    staged = StagedFiles()
    for chunk in chunks(pulled):
        _stage_exports(site, staged, list(_read_chunk(site, configuration, staged, chunk)))
    return staged


def chunks(pulled: Sequence[PulledFile]) -> Iterator[list[PulledFile]]:
    """Files in the parts whose exports are checked together."""
    remaining = iter(pulled)
    while chunk := list(islice(remaining, EXPORTS_A_CHUNK)):
        yield chunk


def read_plates(file: PulledFile, content: bytes, profile: ExportProfile) -> dict[str, StagedRead]:
    """Plate reads of an export by their ids.

    Raises
    ------
    ExportError
        If the export cannot be read as the profile says.
    """
    reads = read_export(content, file.file_name, profile)
    return {result_id("plate_read", file.file_id, read.place_in_export): read for read in reads}


def check_exports(exports: Sequence[ExportRead]) -> tuple[dict[str, pd.DataFrame], StructureReport | None]:
    """Readings of all plate reads of a chunk, by id, and what the structure suite says of them together."""
    frames = {
        plate_read_id: read.readings.assign(plate_read_id=plate_read_id)[READINGS.column_names]
        for export in exports
        for plate_read_id, read in export.plates.items()
    }
    if not frames:
        return frames, None
    formats = {name: read.plate_format for export in exports for name, read in export.plates.items()}
    return frames, check_structure(pd.concat(frames.values(), ignore_index=True), formats)


def map_rows(file: PulledFile, plate_maps: Sequence[PlateMap]) -> list[dict[str, object]]:
    """Rows of `plate_maps` that a plate map file gives."""
    return [
        {
            "map_id": file.file_id,
            "plate_id": plate_map.plate_id,
            "assay": plate_map.assay,
            "mapped_well_count": len(plate_map.wells),
            "received_at": file.received_at,
        }
        for plate_map in plate_maps
    ]


def _read_chunk(
    site: Site, configuration: Configuration, staged: StagedFiles, chunk: Sequence[PulledFile]
) -> Iterator[ExportRead]:
    for file in chunk:
        try:
            content = file.content
            if is_plate_map(content, file.file_name):
                plate_maps = read_plate_map(content, file.file_name)
                staged.files.append(_file_row(file, "plate_map"))
                staged.plate_maps.extend(map_rows(file, plate_maps))
                continue
            name = choose_profile(content, file.file_name, configuration.profiles)
            profile = configuration.profiles[name]
            plates = read_plates(file, content, profile)
        except HalfsatError as error:
            _refuse(site, staged, file, str(error))
            continue
        yield ExportRead(file, name, keep_profile(site, name, profile), plates)


def _stage_exports(site: Site, staged: StagedFiles, exports: Sequence[ExportRead]) -> None:
    """Check the structure of a chunk's readings together and write those that hold."""
    frames, report = check_exports(exports)
    if report is None:
        return
    staged.runs.append(structure_run(report))
    for export in exports:
        reasons = [
            reason for plate_read_id in export.plates for reason in report.reasons.get(plate_read_id, ())
        ]
        if reasons:
            _refuse(site, staged, export.file, "; ".join(reasons), kept_profile=export.kept_profile)
            continue
        row = _file_row(export.file, "export", profile=export.profile, kept_profile=export.kept_profile)
        staged.files.append(row)
        for plate_read_id, read in export.plates.items():
            write_rows(site, READINGS.name, plate_read_id, frames[plate_read_id])
            staged.plate_reads.append(plate_read_row(plate_read_id, export.file.file_id, read))


def _refuse(
    site: Site, staged: StagedFiles, file: PulledFile, reason: str, *, kept_profile: str | None = None
) -> None:
    quarantine(site, file.content, file.file_name, reason)
    staged.files.append(_file_row(file, "quarantined", reason=reason, kept_profile=kept_profile))


def _file_row(
    file: PulledFile,
    kind: str,
    *,
    profile: str | None = None,
    reason: str | None = None,
    kept_profile: str | None = None,
) -> dict[str, object]:
    return {
        "file_id": file.file_id,
        "kind": kind,
        "file_name": file.file_name,
        "byte_count": file.path.stat().st_size,
        "received_at": file.received_at,
        "profile": profile,
        "reason": reason,
        PROFILE_ID: kept_profile,
    }


def plate_read_row(plate_read_id: str, export_id: str, read: StagedRead) -> dict[str, object]:
    """Row of `plate_reads` that a staged read gives."""
    readings = read.readings
    temperature = readings["temperature_c"]
    return {
        "plate_read_id": plate_read_id,
        "export_id": export_id,
        "place_in_export": read.place_in_export,
        "plate_id": read.plate_id,
        "plate_format": read.plate_format,
        "started_at": read.started_at,
        "well_count": readings["well"].nunique(),
        "read_count": int(readings["read_number"].max()),
        "channels": ",".join(sorted(readings["channel"].unique())),
        "duration_s": float(readings["time_s"].max() - readings["time_s"].min()),
        "temperature_low_c": temperature.min(),
        "temperature_high_c": temperature.max(),
    }
