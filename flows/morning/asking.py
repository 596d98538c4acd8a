"""How the pages read results: the published copy, opened once for a request, rows as named tuples.

Knows no page. Queries are the project's own; what a person typed never becomes part of one.
"""

from __future__ import annotations

from collections import namedtuple
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import duckdb

from flows.site.layout import Site
from flows.warehouse.reader import open_published
from models.errors import SiteError


class NotFound(LookupError):
    """There is no such plate, well, series or lot in the current results."""


@contextmanager
def published(site: Site) -> Iterator[duckdb.DuckDBPyConnection]:
    """The latest published copy for the length of one request.

    Raises
    ------
    SiteError
        If nothing has been published yet.
    """
    connection = open_published(site)
    try:
        yield connection
    finally:
        connection.close()


def ask(connection: duckdb.DuckDBPyConnection, sql: str, *given: object) -> list[Any]:
    """Rows of a query, with its columns as fields; `$1`, `$2` in its text stand for what is given.

    Raises
    ------
    SiteError
        If the published copy was made by an earlier version and lacks what is asked.
    """
    try:
        cursor = connection.execute(sql, list(given))
    except (duckdb.CatalogException, duckdb.BinderException) as error:
        raise SiteError(
            "the published results are of an earlier version of halfsat",
            remedy="run a pass: it brings the warehouse up to date and publishes it",
        ) from error
    names = [str(column[0]) for column in cursor.description or ()]
    row = namedtuple("row", names)  # type: ignore[misc]  # the columns are the query's
    return [row._make(values) for values in cursor.fetchall()]


def one(connection: duckdb.DuckDBPyConnection, what: str, sql: str, *given: object) -> Any:
    """The only row of a query.

    Raises
    ------
    NotFound
        If there is none.
    """
    found = ask(connection, sql, *given)
    if not found:
        raise NotFound(f"there is no {what}")
    return found[0]
