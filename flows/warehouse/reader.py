"""How everybody but the loader reads the warehouse: the published copy, read-only.

A query that a person wrote runs in a sandbox: no files, network, settings or extensions, and a limit on time
and memory.
"""

from __future__ import annotations

import difflib
import re
import time
from dataclasses import dataclass

import duckdb
import pyarrow as pa

from flows.site.layout import Site
from flows.warehouse.schema import all_views
from flows.warehouse.view import quoted
from flows.warehouse.views import reading_view
from models.errors import QueryError, SiteError

_TRIES = 3
_BATCH_ROWS = 65_536
_ONE_SELECT = "ask with one SELECT; to see what there is, type: SELECT * FROM duckdb_tables()"


@dataclass(frozen=True)
class QueryLimits:
    """How much a query may take.

    Attributes
    ----------
    time_s
        Longest run, in seconds.
    memory_mb
        Most memory for the query, and most memory for its result, in MB.
    threads
        Processor cores it may use.
    """

    time_s: float = 30.0
    memory_mb: int = 1024
    threads: int = 2


def open_published(site: Site) -> duckdb.DuckDBPyConnection:
    """Open the latest published copy, read-only. It stays as it is however often a new one is published.

    Raises
    ------
    SiteError
        If nothing has been published yet, or the copy is damaged.
    """
    for attempt in range(_TRIES):
        if not site.published_link.exists():
            raise SiteError(
                "the site has no published results yet",
                where=str(site.root),
                remedy=f"run a pass first: halfsat overnight --site {site.root}",
            )
        try:
            connection = duckdb.connect(str(site.published_link.resolve()), read_only=True)
        except duckdb.Error as error:
            # The copy may have been replaced and cleared away since the link was followed.
            if attempt + 1 < _TRIES and not site.published_link.resolve().exists():
                continue
            raise SiteError(
                "the published warehouse is damaged and cannot be opened",
                where=str(site.published_link),
                remedy="run a pass: it publishes a new copy",
            ) from error
        connection.execute("SET TimeZone = 'UTC'")
        return connection
    raise SiteError("the published warehouse changes too fast to be opened", where=str(site.published_link))


def run_query(site: Site, sql: str, limits: QueryLimits | None = None) -> pa.Table:
    """Answer one SELECT from the published copy, in the sandbox.

    Parameters
    ----------
    sql
        One SELECT (or WITH, FROM, VALUES, DESCRIBE, SHOW, SUMMARIZE), over the tables and views that
        `flows/warehouse/TABLES.md` lists.
    limits
        Time and memory it may take.

    Raises
    ------
    QueryError
        If it is no single SELECT, asks for what is not there or not allowed, or takes more than its limits.
    SiteError
        If there is nothing published.
    """
    limits = limits or QueryLimits()
    with open_published(site) as connection:
        _close_off(connection, site, limits)
        try:
            return _answer(connection, sql, limits)
        except duckdb.Error as error:
            raise _explained(error, site, limits) from error
        except RecursionError as error:
            raise QueryError("the query is nested too deeply") from error


def _close_off(connection: duckdb.DuckDBPyConnection, site: Site, limits: QueryLimits) -> None:
    """Shut every way out of the database; afterwards no setting can be changed any more."""
    locked = connection.execute("SELECT current_setting('lock_configuration')").fetchone()
    # Two connections of one process to one copy share their settings: the first has shut them already.
    if locked == (False,):
        for line in (
            f"SET GLOBAL max_execution_time = {max(1, round(limits.time_s * 1000))}",
            f"SET memory_limit = '{limits.memory_mb}MB'",
            f"SET threads = {limits.threads}",
            "SET temp_directory = ''",
            "SET python_enable_replacements = false",
            "SET autoinstall_known_extensions = false",
            "SET autoload_known_extensions = false",
            f"SET allowed_directories = [{quoted(str(site.lake / 'readings'))}]",
            "SET enable_external_access = false",
            "SET lock_configuration = true",
        ):
            connection.execute(line)
    # The published view names the lake where it was when the copy was made; the site may have moved since.
    connection.execute(f"CREATE OR REPLACE TEMP VIEW reading AS {reading_view(site.lake / 'readings').sql}")


def _answer(connection: duckdb.DuckDBPyConnection, sql: str, limits: QueryLimits) -> pa.Table:
    statements = connection.extract_statements(sql)
    if not statements:
        raise QueryError("there is no query", remedy=_ONE_SELECT)
    if len(statements) > 1:
        raise QueryError(f"there are {len(statements)} statements", remedy=_ONE_SELECT)
    if statements[0].type != duckdb.StatementType.SELECT:
        raise QueryError("only SELECT is answered here", remedy=_ONE_SELECT)
    deadline = time.monotonic() + limits.time_s
    reader = connection.execute(statements[0]).to_arrow_reader(_BATCH_ROWS)
    if reader is None:
        raise QueryError("the query gives no rows and no columns", remedy=_ONE_SELECT)
    batches, size = [], 0
    for batch in reader:
        batches.append(batch)
        size += batch.nbytes
        if size > limits.memory_mb * 1_000_000:
            raise QueryError(
                f"the result is larger than {limits.memory_mb} MB", remedy="ask for less, or add a LIMIT"
            )
        if time.monotonic() > deadline:
            raise _too_slow(limits)
    return pa.Table.from_batches(batches, reader.schema)


def _too_slow(limits: QueryLimits) -> QueryError:
    return QueryError(f"the query took longer than {limits.time_s:g} s", remedy="ask for less")


def _explained(error: duckdb.Error, site: Site, limits: QueryLimits) -> QueryError:
    """A database error in plain words, with the nearest name where one was misspelt."""
    text = str(error)
    if isinstance(error, duckdb.InterruptException) or "max_execution_time" in text:
        return _too_slow(limits)
    if isinstance(error, duckdb.OutOfMemoryException):
        return QueryError(
            f"the query needs more than {limits.memory_mb} MB of memory",
            remedy="ask for less, or add a LIMIT",
        )
    if isinstance(error, duckdb.PermissionException):
        return QueryError(
            "a query reads the warehouse only: no files, network, settings or extensions", remedy=_ONE_SELECT
        )
    column = re.search(r'Referenced column "(.+?)" not found|does not have a column named "(.+?)"', text)
    if column:
        wanted = column[1] or column[2]
        return QueryError(f"there is no column '{wanted}' here", remedy=_nearest(wanted, _candidates(text)))
    missing = re.search(r"Table with name (.+?) does not exist", text)
    if missing:
        names = [each.name for each in all_views(site)] + _candidates(text)
        return QueryError(f"there is no table or view '{missing[1]}'", remedy=_nearest(missing[1], names))
    function = re.search(r"Function with name (.+?) does not exist", text)
    if function:
        return QueryError(
            f"there is no function '{function[1]}'", remedy=_nearest(function[1], _candidates(text))
        )
    first, _, rest = text.partition("\n")
    place = re.search(r"LINE (\d+):", rest)
    plain = re.sub(r"^(\w+ )+Error: ", "", first)
    return QueryError(plain, where=f"line {place[1]}" if place else "")


def _candidates(text: str) -> list[str]:
    hints = [line for line in text.splitlines() if line.startswith(("Candidate bindings", "Did you mean"))]
    return [name.rpartition(".")[2] for line in hints for name in re.findall(r'"(.+?)"', line)]


def _nearest(wanted: str, names: list[str]) -> str:
    close = difflib.get_close_matches(wanted.lower(), dict.fromkeys(names), n=3, cutoff=0.5) or names[:3]
    if not close:
        return "flows/warehouse/TABLES.md lists every table and column"
    return "did you mean " + " or ".join(dict.fromkeys(close)) + "?"
