"""One way from a plate read's readings, its map and its recipe to the work that rates and fits are made of.

A pass takes the readings from the lake, a replay reads them from the export's bytes again; from there on
they are the same.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property, lru_cache

import pandas as pd

from flows.site.archive import fetch
from flows.site.layout import Site
from flows.site.recipes import Recipe, read_recipe, recipe_path
from flows.stages.conversion import plate_conversion
from flows.stages.read import PlateMap, StagedRead, read_export, read_plate_map
from flows.stages.work import PlateWork
from models.errors import HalfsatError, SiteError
from models.identity import canonical_json
from models.records.assay import Assay
from models.records.export_profile import ExportProfile
from models.tables import READINGS
from models.tables.keys import ONLY_CHANNEL

FILES_REMEMBERED = 8


@dataclass(frozen=True)
class WorkSource:
    """Where one plate read's work comes from.

    Attributes
    ----------
    export_id, export_name
        The export's bytes and the name under which it came.
    place_in_export
        Which plate of the file, counted from 1.
    map_id, map_name
        The plate map's bytes and the name under which it came.
    """

    plate_read_id: str
    export_id: str
    export_name: str
    place_in_export: int
    map_id: str
    map_name: str


@dataclass(frozen=True)
class KeptRecipe(Recipe):
    """A recipe as it was kept: its spelling, and so its id, stay what they were whatever its records gain."""

    kept: str = ""

    @cached_property
    def canonical(self) -> str:
        """The recipe as it was spelled when it was kept."""
        return self.kept


class RawReader:
    """Plate maps, exports and recipes of a site as records; the last few files are remembered."""

    def __init__(self, site: Site) -> None:
        self.site = site
        self.plate_map = lru_cache(maxsize=FILES_REMEMBERED)(self._plate_map)
        self.recipe = lru_cache(maxsize=None)(self._recipe)
        self._exports: dict[tuple[str, str], dict[int, StagedRead]] = {}

    def plate_read(self, source: WorkSource, profile: ExportProfile) -> StagedRead:
        """A plate read from its export's bytes.

        Raises
        ------
        SiteError
            If the export is missing, has changed, or has no plate in that place.
        ExportError
            If it cannot be read as the profile says.
        """
        key = (source.export_id, canonical_json(profile.model_dump(mode="json")))
        if key not in self._exports:
            while len(self._exports) >= FILES_REMEMBERED:
                self._exports.pop(next(iter(self._exports)))
            reads = read_export(fetch(self.site, source.export_id), source.export_name, profile)
            self._exports[key] = {read.place_in_export: read for read in reads}
        plates = self._exports[key]
        if source.place_in_export not in plates:
            raise SiteError(
                f"plate {source.place_in_export} is not found in the export; it has {len(plates)}",
                where=source.export_name,
                remedy="the profile or the code that read it was another one",
            )
        return plates[source.place_in_export]

    def _plate_map(self, map_id: str, map_name: str) -> dict[str, PlateMap]:
        return {each.plate_id: each for each in read_plate_map(fetch(self.site, map_id), map_name)}

    def _recipe(self, recipe_id: str) -> KeptRecipe:
        recipe = read_recipe(self.site, recipe_id)
        kept = recipe_path(self.site, recipe_id).read_text(encoding="utf-8")
        return KeptRecipe(
            recipe.assay_name,
            recipe.assay,
            recipe.profile_name,
            recipe.profile,
            recipe.limits,
            recipe.code_version,
            kept,
        )


def work_from_raw(reader: RawReader, source: WorkSource, recipe: Recipe) -> PlateWork:
    """Work of a plate read from nothing but raw bytes and a recipe.

    Raises
    ------
    SiteError
        If a raw file is missing or has changed.
    HalfsatError
        If export or map cannot be read as they were, or the signal cannot be converted.
    """
    read = reader.plate_read(source, recipe.profile)
    readings = stored_readings(source.plate_read_id, read)
    maps = reader.plate_map(source.map_id, source.map_name)
    channels = sorted(set(readings["channel"]))
    channel = channel_of(channels, recipe.assay_name, recipe.assay)
    return make_work(source.plate_read_id, read.plate_id, source.map_id, recipe, channel, readings, maps)


def make_work(
    plate_read_id: str,
    plate_id: str,
    map_id: str,
    recipe: Recipe,
    channel: str,
    readings: pd.DataFrame,
    plate_maps: Mapping[str, PlateMap],
) -> PlateWork:
    """Work of a plate read from its readings.

    Parameters
    ----------
    channel
        The channel that the assay reads.
    readings
        All its readings, as the lake gives them.
    plate_maps
        Plates of the map file, by plate_id.

    Raises
    ------
    HalfsatError
        If the map does not have the plate, or the signal cannot be converted.
    """
    if plate_id not in plate_maps:
        raise HalfsatError(f"the plate map {map_id[:12]} does not describe the plate {plate_id}")
    wells = plate_maps[plate_id].wells
    conversion = plate_conversion(recipe.assay, readings, wells, channel)
    of_channel = readings[readings["channel"] == channel].reset_index(drop=True)
    return PlateWork(plate_read_id, plate_id, map_id, recipe, of_channel, wells, conversion)


def stored_readings(plate_read_id: str, read: StagedRead) -> pd.DataFrame:
    """Readings of a plate read exactly as they come back from the lake."""
    frame: pd.DataFrame = READINGS.to_arrow(read.readings.assign(plate_read_id=plate_read_id)).to_pandas()
    return frame


def channel_of(channels: Sequence[str], assay_name: str, assay: Assay) -> str:
    """Channel of the export that the assay reads; an export that names none has only the one.

    Raises
    ------
    HalfsatError
        If the assay leaves open which, or names one that the export does not have.
    """
    wanted = assay.signal.channel
    if list(channels) == [ONLY_CHANNEL]:
        return ONLY_CHANNEL
    if wanted is None:
        if len(channels) == 1:
            return channels[0]
        raise HalfsatError(
            f"its export has the channels {', '.join(channels)}",
            remedy=f"say signal.channel in config/assays/{assay_name}.toml",
        )
    if wanted not in channels:
        raise HalfsatError(
            f"its export has no channel '{wanted}', but {', '.join(channels)}",
            remedy=f"mend signal.channel in config/assays/{assay_name}.toml or the profile",
        )
    return wanted
