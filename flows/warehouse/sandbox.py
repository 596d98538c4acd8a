"""Answers one SELECT in a process of its own, where nothing but the database can be reached.

Runs as `python -m flows.warehouse.sandbox`: takes a request as JSON on standard input, gives an Arrow stream
on standard output, or a JSON line on standard error that says what went wrong. A process can be stopped and
its memory limited whatever the query does; nothing of the caller is at stake.
"""

from __future__ import annotations

import json
import os
import resource
import sys
from collections.abc import Mapping
from io import IOBase
from typing import Literal, NotRequired, TypedDict

import duckdb
import pyarrow as pa

_BATCH_ROWS = 65_536
# What interpreter, DuckDB and Arrow map before the first row, with room for the result on its way out.
_BASE_MB = 512
FAILED = 3


ParameterValue = str | int | float | None


class Request(TypedDict):
    """What the sandbox is asked."""

    database: str
    readings: str
    reading_sql: str
    sql: str
    time_ms: int
    memory_mb: int
    threads: int
    parameters: NotRequired[dict[str, ParameterValue]]


class Failure(TypedDict):
    """Why there is no answer."""

    kind: Literal["statements", "not_select", "database", "memory", "nesting"]
    error: str
    text: str


class Refused(Exception):
    """The request is no single SELECT."""

    def __init__(self, kind: Literal["statements", "not_select"], text: str) -> None:
        self.kind: Literal["statements", "not_select"] = kind
        super().__init__(text)


def open_closed(request: Request) -> duckdb.DuckDBPyConnection:
    """Open the database read-only and shut every way out of it; no setting can be changed afterwards."""
    connection = duckdb.connect(request["database"], read_only=True)
    readings = "'" + request["readings"].replace("'", "''") + "'"
    for line in (
        "SET TimeZone = 'UTC'",
        "SET temp_directory = ''",
        f"SET GLOBAL max_execution_time = {request['time_ms']}",
        f"SET memory_limit = '{request['memory_mb']}MB'",
        f"SET threads = {request['threads']}",
        "SET python_enable_replacements = false",
        "SET autoinstall_known_extensions = false",
        "SET autoload_known_extensions = false",
        f"SET allowed_directories = [{readings}]",
        "SET enable_external_access = false",
        "SET lock_configuration = true",
        # The published view names the lake where it was when the copy was made; the site may have moved.
        f"CREATE OR REPLACE TEMP VIEW reading AS {request['reading_sql']}",
    ):
        connection.execute(line)
    return connection


def answer(
    connection: duckdb.DuckDBPyConnection, sql: str, parameters: Mapping[str, ParameterValue] | None = None
) -> pa.RecordBatchReader:
    """Run one SELECT, its named parameters bound to values.

    Raises
    ------
    Refused
        If it is anything else.
    duckdb.Error
        If it cannot be answered.
    """
    statements = connection.extract_statements(sql)
    if len(statements) != 1:
        raise Refused("statements", str(len(statements)))
    if statements[0].type != duckdb.StatementType.SELECT:
        raise Refused("not_select", statements[0].type.name)
    given = dict(parameters) if parameters else None
    reader: pa.RecordBatchReader = connection.sql(statements[0], params=given).to_arrow_reader(_BATCH_ROWS)
    return reader


def respond(
    connection: duckdb.DuckDBPyConnection,
    sql: str,
    output: IOBase,
    parameters: Mapping[str, ParameterValue] | None = None,
) -> Failure | None:
    """Write the answer to one SELECT as an Arrow stream; return why there is none, or None."""
    try:
        reader = answer(connection, sql, parameters)
        with pa.ipc.new_stream(pa.PythonFile(output, "w"), reader.schema) as stream:
            for batch in reader:
                stream.write_batch(batch)
        output.flush()
    except Refused as refused:
        return {"kind": refused.kind, "error": "", "text": str(refused)}
    except (duckdb.OutOfMemoryException, MemoryError, pa.ArrowMemoryError) as error:
        return {"kind": "memory", "error": type(error).__name__, "text": str(error)}
    except RecursionError as error:
        return {"kind": "nesting", "error": "RecursionError", "text": str(error)}
    except (duckdb.Error, pa.ArrowException, OSError, RuntimeError) as error:
        return {"kind": "database", "error": type(error).__name__, "text": str(error)}
    return None


def main() -> int:
    """Answer the request on standard input; exit code 0, or 3 with a failure on standard error."""
    request: Request = json.load(sys.stdin)
    # Before the limit, so that threads and buffers of the libraries are there.
    connection = open_closed(request)
    limit = (request["memory_mb"] * 2 + _BASE_MB) << 20
    resource.setrlimit(resource.RLIMIT_DATA, (limit, limit))
    resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
    output = os.fdopen(sys.stdout.fileno(), "wb", closefd=False)
    failure = respond(connection, request["sql"], output, request.get("parameters"))
    if failure is None:
        return 0
    sys.stderr.write("\n" + json.dumps(failure) + "\n")
    sys.stderr.flush()
    return FAILED


if __name__ == "__main__":
    code = main()
    # A database that ran out of memory may not be able to close any more: leave without asking it to.
    os._exit(code)
