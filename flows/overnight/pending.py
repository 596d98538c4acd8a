"""Which staged plate reads are ready to be analysed, and what the others wait for.

A plate read is ready when it has no analysis yet and its plate has a plate map, an assay and a profile.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fnmatch import fnmatchcase
from typing import Any

from checks.gates import resolve_limits
from flows.frames import rows
from flows.lake import read_rows
from flows.overnight.report import Waiting
from flows.site.configuration import Configuration
from flows.site.layout import Site
from flows.site.recipes import Recipe, code_version
from flows.stages.kept_profiles import read_profile
from flows.stages.plate_work import RawReader, channel_of, make_work
from flows.stages.recorded import profiles_used
from flows.stages.work import PlateWork
from flows.warehouse.writer import loader
from models.errors import HalfsatError
from models.records.export_profile import ExportProfile
from models.tables import READINGS

_NOT_ANALYSED = """
    SELECT p.plate_read_id, p.export_id, p.plate_id, p.channels, f.file_name, f.profile,
           m.map_id, m.assay, m.file_name AS map_name
    FROM plate_reads p
    JOIN files f ON f.file_id = p.export_id
    LEFT JOIN (
        SELECT m.plate_id, m.map_id, m.assay, g.file_name
        FROM plate_maps m JOIN files g ON g.file_id = m.map_id
        QUALIFY row_number() OVER (PARTITION BY m.plate_id ORDER BY m.received_at DESC, m.map_id DESC) = 1
    ) m ON m.plate_id = p.plate_id
    ANTI JOIN analyses a ON a.plate_read_id = p.plate_read_id
    ORDER BY f.received_at, f.file_name, p.place_in_export
"""


@dataclass(frozen=True)
class Ready:
    """A plate read that can be analysed, before its readings are loaded."""

    plate_read_id: str
    plate_id: str
    map_id: str
    map_name: str
    channel: str
    recipe: Recipe


def find_pending(site: Site, configuration: Configuration) -> tuple[list[Ready], list[Waiting]]:
    """Sort the plate reads that have no analysis into those that are ready and those that wait.

    Parameters
    ----------
    site
        The site; its warehouse says what is staged.
    configuration
        Assays, profiles and limits that are in force now.
    """
    with loader(site) as connection:
        found = connection.sql(_NOT_ANALYSED).df().astype(object)
    found = found.where(found.notna(), None)
    ready: list[Ready] = []
    waiting: list[Waiting] = []
    recipes = _RecipeBook(site, configuration, profiles_used(site) if len(found) else {})
    for row in rows(found):
        try:
            ready.append(_make_ready(row, configuration, recipes))
        except HalfsatError as error:
            waiting.append(Waiting(str(row.plate_id), str(error)))
    return ready, waiting


def load_work(site: Site, ready: Sequence[Ready]) -> tuple[list[PlateWork], list[Waiting]]:
    """Read the readings and the plate map of each plate read that is ready.

    Returns
    -------
    tuple
        Plate reads to analyse, and those whose signal cannot be converted, with the reason.

    Raises
    ------
    SiteError
        If raw archive or lake have lost or changed a file.
    """
    reader = RawReader(site)
    works: list[PlateWork] = []
    waiting: list[Waiting] = []
    for each in ready:
        readings = read_rows(site, READINGS.name, each.plate_read_id)
        plate_maps = reader.plate_map(each.map_id, each.map_name)
        try:
            work = make_work(
                each.plate_read_id,
                each.plate_id,
                each.map_id,
                each.recipe,
                each.channel,
                readings,
                plate_maps,
            )
        except HalfsatError as error:
            waiting.append(Waiting(each.plate_id, str(error)))
            continue
        works.append(work)
    return works, waiting


class _RecipeBook:
    """Recipes by assay and profile, each made once.

    The profile in a recipe is the one that read the export, though the site may have edited it since: the
    readings in the lake are what it made of the bytes.
    """

    def __init__(self, site: Site, configuration: Configuration, used: Mapping[str, str]) -> None:
        self.site, self.configuration, self.used = site, configuration, used
        self._made: dict[tuple[str, str], Recipe] = {}

    def of(self, assay_name: str, profile_name: str, export_id: str) -> Recipe:
        """The recipe for an export.

        Raises
        ------
        HalfsatError
            If neither the profile as it was nor one of that name is there.
        """
        key = (assay_name, self.used.get(export_id, profile_name))
        if key not in self._made:
            assay = self.configuration.assays[assay_name]
            limits = resolve_limits(self.configuration.gates, assay.gates)
            profile = self._profile(profile_name, export_id)
            self._made[key] = Recipe(assay_name, assay, profile_name, profile, limits, code_version())
        return self._made[key]

    def _profile(self, name: str, export_id: str) -> ExportProfile:
        if export_id in self.used:
            return read_profile(self.site, self.used[export_id])[1]
        if name not in self.configuration.profiles:
            raise HalfsatError(
                f"the profile '{name}' that read its export is gone", remedy="put it back in config/profiles"
            )
        return self.configuration.profiles[name]


def _make_ready(row: Any, configuration: Configuration, recipes: _RecipeBook) -> Ready:
    if row.map_id is None:
        raise HalfsatError("no plate map for this plate yet", remedy="drop the plate map into the inbox")
    assay_name = _assay_of(row.plate_id, row.assay, configuration)
    channel = channel_of(row.channels.split(","), assay_name, configuration.assays[assay_name])
    recipe = recipes.of(assay_name, row.profile, row.export_id)
    return Ready(row.plate_read_id, row.plate_id, row.map_id, row.map_name, channel, recipe)


def _assay_of(plate_id: str, named: str | None, configuration: Configuration) -> str:
    """Assay that the plate map names, or the one whose plate patterns fit."""
    if named is not None:
        if named not in configuration.assays:
            known = ", ".join(sorted(configuration.assays))
            raise HalfsatError(
                f"its plate map names the assay '{named}', which is not configured",
                remedy=f"assays here are {known}",
            )
        return str(named)
    fitting = [
        name
        for name, assay in configuration.assays.items()
        if any(fnmatchcase(plate_id, pattern) for pattern in assay.plates)
    ]
    if len(fitting) != 1:
        found = f"the assays {', '.join(fitting)} all claim it" if fitting else "no assay claims it"
        raise HalfsatError(found, remedy="name the assay in the plate map, or mend 'plates' in config/assays")
    return fitting[0]
