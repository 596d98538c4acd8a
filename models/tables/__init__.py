"""The one definition of every stored table: columns, kinds, units, meaning.

Parquet schemas, DuckDB tables, column comments and the documentation page are all derived from it.
"""

from models.errors import UnknownName
from models.tables.fits import (
    COMPARISONS,
    CORRELATIONS,
    ESTIMATES,
    FIT_POINTS,
    FITS,
    GRIDS,
    SERIES,
    SHIFTS,
)
from models.tables.intake import FILES, PASSES, PLATE_MAPS, PLATE_READS, READINGS
from models.tables.lots import GATE_RUNS, LOT_VALUE_SOURCES, LOT_VALUES, RECIPES
from models.tables.plate_statistics import PLATE_STATISTICS
from models.tables.results import ANALYSES, FINDINGS, RATES, WELLS
from models.tables.suggestions import SUGGESTIONS
from models.tables.table import Column, Table

TABLES: tuple[Table, ...] = (
    PASSES,
    FILES,
    PLATE_MAPS,
    PLATE_READS,
    READINGS,
    RECIPES,
    ANALYSES,
    WELLS,
    RATES,
    FINDINGS,
    GATE_RUNS,
    SERIES,
    GRIDS,
    FITS,
    ESTIMATES,
    FIT_POINTS,
    CORRELATIONS,
    COMPARISONS,
    SHIFTS,
    SUGGESTIONS,
    PLATE_STATISTICS,
    LOT_VALUES,
    LOT_VALUE_SOURCES,
)


def table(name: str) -> Table:
    """Return the table with this name.

    Raises
    ------
    UnknownName
        If there is no such table.
    """
    for each in TABLES:
        if each.name == name:
            return each
    known = ", ".join(each.name for each in TABLES)
    raise UnknownName(f"there is no table '{name}'", remedy=f"tables are {known}")


__all__ = [
    "ANALYSES",
    "COMPARISONS",
    "CORRELATIONS",
    "ESTIMATES",
    "FILES",
    "FINDINGS",
    "FITS",
    "FIT_POINTS",
    "GATE_RUNS",
    "GRIDS",
    "LOT_VALUES",
    "LOT_VALUE_SOURCES",
    "PASSES",
    "PLATE_MAPS",
    "PLATE_READS",
    "PLATE_STATISTICS",
    "RATES",
    "READINGS",
    "RECIPES",
    "SERIES",
    "SHIFTS",
    "SUGGESTIONS",
    "TABLES",
    "WELLS",
    "Column",
    "Table",
    "table",
]
