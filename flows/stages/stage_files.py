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
from checks.structure import check_structure
from flows.lake import write_rows
from flows.site.archive import quarantine
from flows.site.configuration import Configuration
from flows.site.layout import Site
from flows.stages.gate_runs import structure_run
from flows.stages.pull import PulledFile
from flows.stages.read import (
    StagedRead,
    choose_profile,
    is_plate_map,
    read_export,
    read_plate_map,
)
from models.errors import HalfsatError
from models.identity import result_id
from models.tables import READINGS

EXPORTS_A_CHUNK = 40


@dataclass
class StagedFiles:
    """Rows that staging adds to the warehouse, and the structure suite's runs.

    Attributes
    ----------
    files, plate_maps, plate_reads
        Rows of the tables of the same names; `files` without its pass.
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
class _ReadExport:
    file: PulledFile
    profile: str
    plates: dict[str, StagedRead]


def stage_files(site: Site, configuration: Configuration, pulled: Sequence[PulledFile]) -> StagedFiles:
    """Stage every pulled file: map, export, or quarantine.

    Parameters
    ----------
    site
        Where lake and quarantine are.
    configuration
        The site's profiles.
    pulled
        New files with their bytes, already in the raw archive.
    """
    staged = StagedFiles()
    remaining = iter(pulled)
    while chunk := list(islice(remaining, EXPORTS_A_CHUNK)):
        _stage_exports(site, staged, list(_read_chunk(site, configuration, staged, chunk)))
    return staged


def _read_chunk(
    site: Site, configuration: Configuration, staged: StagedFiles, chunk: Sequence[PulledFile]
) -> Iterator[_ReadExport]:
    for file in chunk:
        try:
            content = file.content
            if is_plate_map(content, file.file_name):
                _accept_map(staged, file, content)
                continue
            profile = choose_profile(content, file.file_name, configuration.profiles)
            reads = read_export(content, file.file_name, configuration.profiles[profile])
        except HalfsatError as error:
            _refuse(site, staged, file, str(error))
            continue
        plates = {result_id("plate_read", file.file_id, read.place_in_export): read for read in reads}
        yield _ReadExport(file, profile, plates)


def _accept_map(staged: StagedFiles, file: PulledFile, content: bytes) -> None:
    plate_maps = read_plate_map(content, file.file_name)
    staged.files.append(_file_row(file, "plate_map"))
    staged.plate_maps.extend(
        {
            "map_id": file.file_id,
            "plate_id": plate_map.plate_id,
            "assay": plate_map.assay,
            "mapped_well_count": len(plate_map.wells),
            "received_at": file.received_at,
        }
        for plate_map in plate_maps
    )


def _stage_exports(site: Site, staged: StagedFiles, exports: Sequence[_ReadExport]) -> None:
    """Check the structure of a chunk's readings together and write those that hold."""
    frames = {
        plate_read_id: read.readings.assign(plate_read_id=plate_read_id)[READINGS.column_names]
        for export in exports
        for plate_read_id, read in export.plates.items()
    }
    if not frames:
        return
    formats = {name: read.plate_format for export in exports for name, read in export.plates.items()}
    report = check_structure(pd.concat(frames.values(), ignore_index=True), formats)
    staged.runs.append(structure_run(report))
    for export in exports:
        reasons = [
            reason for plate_read_id in export.plates for reason in report.reasons.get(plate_read_id, ())
        ]
        if reasons:
            _refuse(site, staged, export.file, "; ".join(reasons))
            continue
        staged.files.append(_file_row(export.file, "export", profile=export.profile))
        for plate_read_id, read in export.plates.items():
            write_rows(site, READINGS.name, plate_read_id, frames[plate_read_id])
            staged.plate_reads.append(_plate_read_row(plate_read_id, export.file.file_id, read))


def _refuse(site: Site, staged: StagedFiles, file: PulledFile, reason: str) -> None:
    quarantine(site, file.content, file.file_name, reason)
    staged.files.append(_file_row(file, "quarantined", reason=reason))


def _file_row(
    file: PulledFile, kind: str, *, profile: str | None = None, reason: str | None = None
) -> dict[str, object]:
    return {
        "file_id": file.file_id,
        "kind": kind,
        "file_name": file.file_name,
        "byte_count": file.path.stat().st_size,
        "received_at": file.received_at,
        "profile": profile,
        "reason": reason,
    }


def _plate_read_row(plate_read_id: str, export_id: str, read: StagedRead) -> dict[str, object]:
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
