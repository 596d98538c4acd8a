"""How everybody but the loader reads the warehouse: the published copy, read-only.

A query that a person wrote is answered in a process of its own (flows.warehouse.sandbox), with limits on time
and memory; what went wrong there is put into plain words here.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
import tempfile
import threading
from collections.abc import Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass

import duckdb
import pyarrow as pa

from flows.site.layout import Site
from flows.warehouse import sandbox
from flows.warehouse.bookkeeping import STORED
from flows.warehouse.explain import explain, too_slow
from flows.warehouse.sandbox import ParameterValue, Request
from flows.warehouse.schema import all_views
from flows.warehouse.views import reading_view
from models.errors import QueryError, SiteError

_TRIES = 3
# Starting the process, and what a query may take to notice that its time is over.
_GRACE_S = 3.0


@dataclass(frozen=True)
class QueryLimits:
    """How much a query may take.

    Attributes
    ----------
    time_s
        Longest run, in seconds.
    memory_mb
        Most memory for the query, and largest result, in MB.
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
        path = _published_path(site)
        try:
            connection = duckdb.connect(path, read_only=True)
        except duckdb.Error as error:
            # The copy may have been replaced and cleared away since the link was followed.
            if attempt + 1 < _TRIES and path != os.path.realpath(site.published_link):
                continue
            raise SiteError(
                "the published warehouse is damaged and cannot be opened",
                where=str(site.published_link),
                remedy="run a pass: it publishes a new copy",
            ) from error
        connection.execute("SET TimeZone = 'UTC'")
        return connection
    raise SiteError("the published warehouse changes too fast to be opened", where=str(site.published_link))


def run_query(
    site: Site,
    sql: str,
    limits: QueryLimits | None = None,
    parameters: Mapping[str, ParameterValue] | None = None,
) -> pa.Table:
    """Answer one SELECT from the published copy, in the sandbox.

    Parameters
    ----------
    sql
        One SELECT (or WITH, FROM, VALUES, DESCRIBE, SHOW, SUMMARIZE), over the tables and views that
        `flows/warehouse/TABLES.md` lists.
    limits
        Time and memory it may take.
    parameters
        Values of its named parameters, `$lot` by `lot`: bound by the database, never part of its text.

    Raises
    ------
    QueryError
        If it is no single SELECT, asks for what is not there or not allowed, or takes more than its limits.
    SiteError
        If there is nothing published.
    """
    limits = limits or QueryLimits()
    request = request_for(site, sql, limits)
    if parameters:
        request["parameters"] = dict(parameters)
    return _ask_sandbox(request, limits, names_to_ask(site))


def request_for(site: Site, sql: str, limits: QueryLimits) -> Request:
    """What the sandbox is asked for a query on a site.

    Raises
    ------
    SiteError
        If there is nothing published.
    """
    readings = site.lake / "readings"
    return {
        "database": _published_path(site),
        "readings": str(readings),
        "reading_sql": reading_view(readings).sql,
        "sql": sql,
        "time_ms": max(1, round(limits.time_s * 1000)),
        "memory_mb": limits.memory_mb,
        "threads": limits.threads,
    }


def names_to_ask(site: Site) -> list[str]:
    """Every table and view that a query can name."""
    return [*(each.name for each in STORED), *(each.name for each in all_views(site))]


def _ask_sandbox(request: Request, limits: QueryLimits, names: Sequence[str]) -> pa.Table:
    """Start the sandbox, and stop it whatever happens."""
    stopped = threading.Event()
    with tempfile.TemporaryFile() as errors:
        process = subprocess.Popen(
            [sys.executable, "-P", "-m", sandbox.__name__],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=errors,
            env={"PYTHONPATH": os.pathsep.join(filter(None, sys.path))},
            cwd="/",
        )
        assert process.stdout is not None

        def stop() -> None:
            stopped.set()
            process.kill()

        late = threading.Timer(limits.time_s + _GRACE_S, stop)
        late.start()
        try:
            table = _exchange(process, request, limits)
            code = process.wait()
        finally:
            late.cancel()
            process.kill()
            process.wait()
            process.stdout.close()
        if table is not None and code == 0:
            return table
        if stopped.is_set():
            raise too_slow(limits.time_s)
        errors.seek(0)
        raise explain(errors.read(), request["time_ms"] / 1000, limits.memory_mb, names)


def _exchange(process: subprocess.Popen[bytes], request: Request, limits: QueryLimits) -> pa.Table | None:
    """Hand the request over and take the answer; None where it broke off."""
    assert process.stdin is not None
    assert process.stdout is not None
    with suppress(BrokenPipeError):
        process.stdin.write(json.dumps(request).encode())
        process.stdin.close()
    batches, size = [], 0
    try:
        answer = os.fdopen(process.stdout.fileno(), "rb", closefd=False)
        reader = pa.ipc.open_stream(pa.PythonFile(answer))
        for batch in reader:
            batches.append(batch)
            size += batch.nbytes
            if size > limits.memory_mb << 20:
                raise QueryError(
                    f"the result is larger than {limits.memory_mb} MB", remedy="ask for less, or add a LIMIT"
                )
        return pa.Table.from_batches(batches, reader.schema)
    except (pa.ArrowException, OSError):
        return None


def _published_path(site: Site) -> str:
    if not site.published_link.exists():
        raise SiteError(
            "the site has no published results yet",
            where=str(site.root),
            remedy=f"run a pass first: halfsat overnight --site {site.root}",
        )
    return os.path.realpath(site.published_link)
