"""Queries that people write: what is answered, what is refused in which words, and that nothing gets out."""

import io
import json
import os
import re
import shutil
import threading
import time

import pyarrow as pa
import pytest

from flows.warehouse import sandbox
from flows.warehouse.explain import explain
from flows.warehouse.reader import QueryLimits, names_to_ask, open_published, request_for, run_query
from models.errors import QueryError, SiteError
from tests.flows.tiny_site import empty_site, tiny_site

SHORT = QueryLimits(time_s=1.5, memory_mb=200, threads=1)
CLOSED = "reads the warehouse only"
ONE = "only SELECT"
# Whether time or memory runs out first depends on the machine.
TOO_MUCH = r"longer than 1\.5 s|(more|larger) than 200 MB"


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    return tiny_site(tmp_path_factory.mktemp("tiny"))


@pytest.fixture(scope="module")
def site(made):
    return made.site


ESCAPES = {
    # Files to read.
    "read_text": ("SELECT * FROM read_text('{secret}')", CLOSED),
    "read_blob": ("SELECT * FROM read_blob('{secret}')", CLOSED),
    "read_csv": ("SELECT * FROM read_csv('{secret}')", CLOSED),
    "sniff_csv": ("SELECT * FROM sniff_csv('{secret}')", CLOSED),
    "read_json": ("SELECT * FROM read_json('{secret}')", CLOSED),
    "read_parquet": ("SELECT * FROM read_parquet('{secret}')", CLOSED),
    "parquet_metadata": ("SELECT * FROM parquet_metadata('{secret}')", CLOSED),
    "file as a table": ("SELECT * FROM '{secret}'", CLOSED),
    "glob": ("SELECT * FROM glob('/etc/*')", CLOSED),
    "up and out of the lake": ("SELECT * FROM read_text('{lake}/readings/../../config/site.toml')", CLOSED),
    "raw files": ("SELECT * FROM read_blob('{root}/raw/*/*')", CLOSED),
    "ledger": ("SELECT * FROM read_text('{root}/ledger/ledger.jsonl')", CLOSED),
    "list of files": ("SELECT * FROM read_text(['{lake}/readings/x.parquet', '{secret}'])", CLOSED),
    "query in a query": ("SELECT * FROM query('SELECT * FROM read_text(''{secret}'')')", CLOSED),
    "query_table": ("SELECT * FROM query_table(['{secret}'])", CLOSED),
    # Files and tables to write.
    "copy": ("COPY (SELECT 1) TO '{out}'", ONE),
    "copy into the lake": ("COPY (SELECT 1) TO '{lake}/readings/evil.parquet'", ONE),
    "export": ("EXPORT DATABASE '{out}'", ONE),
    "insert": ("INSERT INTO passes SELECT * FROM passes", ONE),
    "update": ("UPDATE estimates SET value = 0", ONE),
    "delete": ("DELETE FROM findings", ONE),
    "drop": ("DROP TABLE findings", ONE),
    "create": ("CREATE TABLE mine AS SELECT 1", ONE),
    "temporary": ("CREATE TEMP TABLE mine AS SELECT 1", ONE),
    "insert within a query": ("WITH a AS (DELETE FROM findings RETURNING *) SELECT * FROM a", CLOSED),
    "log to a file": ("SELECT * FROM enable_logging(storage = 'file', storage_path = '{out}')", CLOSED),
    # Other databases, extensions, network.
    "attach": ("ATTACH '{secret}' AS other", ONE),
    "attach the loader's file": ("ATTACH '{root}/warehouse/loader.duckdb' AS other", ONE),
    "install": ("INSTALL httpfs", ONE),
    "load": ("LOAD httpfs", ONE),
    "http": ("SELECT * FROM read_csv('http://127.0.0.1:9/x.csv')", CLOSED),
    "https as a table": ("SELECT * FROM 'https://localhost/x.parquet'", CLOSED),
    "s3": ("SELECT * FROM read_parquet('s3://bucket/x.parquet')", CLOSED),
    "secret": ("CREATE SECRET s (TYPE s3, KEY_ID 'a', SECRET 'b')", ONE),
    "sqlite_scan": ("SELECT * FROM sqlite_scan('{secret}', 't')", CLOSED),
    # Settings and the process round it.
    "set": ("SET memory_limit = '100GB'", ONE),
    "set in global": ("SET GLOBAL max_execution_time = 0", ONE),
    "reset": ("RESET enable_external_access", ONE),
    "pragma": ("PRAGMA enable_profiling", ONE),
    "call": ("CALL pragma_database_size()", ONE),
    "variable": ("SET VARIABLE x = 1", ONE),
    "environment": ("SELECT getenv('HOME')", "no function 'getenv'"),
    "python variables": ("SELECT * FROM request", "no table or view 'request'"),
    "prepared": ("PREPARE p AS SELECT 1", ONE),
    "checkpoint": ("CHECKPOINT", ONE),
    "use": ("USE memory", ONE),
    # More than one statement.
    "two statements": ("SELECT 1; DROP TABLE findings", "2 statements"),
    "hidden second statement": ("SELECT 1 /* ; */; -- \n COPY (SELECT 1) TO '{out}'", "2 statements"),
    "nothing": (" ;; -- nothing", "no query"),
}

BOMBS = {
    "time": ("SELECT count(*) FROM range(100000000000) a, range(1000) b", "longer than 1.5 s"),
    "endless recursion": (
        "WITH RECURSIVE t(a) AS (SELECT 1 UNION ALL SELECT a FROM t) SELECT a FROM t",
        TOO_MUCH,
    ),
    "deep nesting": ("SELECT " + "(" * 5000 + "1" + ")" * 5000, "nested too deeply"),
    "long sum": ("SELECT 1" + "+1" * 50_000, "nested too deeply"),
    "deep subqueries": ("SELECT * FROM (" * 3000 + "SELECT 1" + ")" * 3000, "nested too deeply"),
    "one huge value": ("SELECT repeat('x', 3000000000)", "more than 200 MB"),
    "huge list": ("SELECT list(i) FROM range(1000000000) t(i)", TOO_MUCH),
    "many large values": ("SELECT repeat('x', 10000000) || i FROM range(1000) t(i)", TOO_MUCH),
    "large sort": ("SELECT * FROM range(200000000) t(i) ORDER BY hash(i)", TOO_MUCH),
    "large answer": ("SELECT i, i + 1, i + 2, i + 3 FROM range(1000000000) t(i)", TOO_MUCH),
}


@pytest.fixture(scope="module")
def closed(site, tmp_path_factory):
    """The sandbox as its process opens it, kept open here: starting a process for each attempt takes long.

    It has a copy of its own, because connections of one process to one file share their settings.
    """
    request = request_for(site, "", SHORT)
    copy = shutil.copy(request["database"], tmp_path_factory.mktemp("copy") / "copy.duckdb")
    with sandbox.open_closed({**request, "database": str(copy)}) as connection:
        yield connection


def refusal(connection, site, sql: str) -> str:
    output = io.BytesIO()
    failure = sandbox.respond(connection, sql, output)
    assert failure is not None, output.getvalue()
    assert b"hunter" not in output.getvalue()
    return str(explain(json.dumps(failure).encode(), SHORT.time_s, SHORT.memory_mb, names_to_ask(site)))


@pytest.mark.parametrize("name", ESCAPES)
def test_no_query_gets_out(site, closed, tmp_path, name):
    secret, out = tmp_path / "secret.csv", tmp_path / "out"
    secret.write_text("password\nhunter\n")
    sql, says = ESCAPES[name]
    for sign, path in {"{secret}": secret, "{out}": out, "{lake}": site.lake, "{root}": site.root}.items():
        sql = sql.replace(sign, str(path))
    before = {path: path.stat().st_mtime_ns for path in site.root.rglob("*")}
    said = refusal(closed, site, sql)
    assert says in said
    assert "hunter" not in said
    assert not out.exists()
    assert {path: path.stat().st_mtime_ns for path in site.root.rglob("*")} == before


@pytest.mark.parametrize("name", BOMBS)
def test_no_query_takes_more_than_its_share(site, name):
    sql, says = BOMBS[name]
    began = time.monotonic()
    with pytest.raises(QueryError) as refused:
        run_query(site, sql, SHORT)
    assert time.monotonic() - began < 15
    assert re.search(says, str(refused.value)), str(refused.value)


@pytest.mark.parametrize("name", ["read_text", "copy into the lake", "set", "two statements"])
def test_the_process_refuses_what_its_parts_refuse(site, tmp_path, name):
    sql, says = ESCAPES[name]
    secret = tmp_path / "secret.csv"
    secret.write_text("password\nhunter\n")
    with pytest.raises(QueryError, match=says):
        run_query(site, sql.replace("{secret}", str(secret)).replace("{lake}", str(site.lake)), SHORT)


def test_the_warehouse_is_unharmed_after_all_that(site):
    assert run_query(site, "SELECT count(*) FROM findings").to_pylist() == [{"count_star()": 2}]


@pytest.mark.parametrize(
    ("sql", "row_count"),
    [
        ("SELECT * FROM lot_latest", 2),
        ("FROM lot_latest", 2),
        ("WITH a AS (SELECT 1 AS x) SELECT * FROM a;", 1),
        ("-- a note\nSELECT count(*) FROM reading", 1),
        ("VALUES (1), (2)", 2),
        ("DESCRIBE lot_latest", 19),
        ("SELECT * FROM lot_latest WHERE false", 0),
        ("SELECT lot, median(value) FROM current_estimates GROUP BY ALL", 2),
    ],
)
def test_one_select_in_any_dress_is_answered(closed, sql, row_count):
    output = io.BytesIO()
    assert sandbox.respond(closed, sql, output) is None
    assert pa.ipc.open_stream(output.getvalue()).read_all().num_rows == row_count


def test_show_tables_lists_what_there_is(site):
    names = {row["name"] for row in run_query(site, "SHOW TABLES").to_pylist()}
    assert {"lot_latest", "held_wells", "reading", "estimates"} <= names


def test_readings_are_reached_through_the_view(made):
    answer = run_query(
        made.site, "SELECT plate_read_id, count(*) AS reads FROM reading GROUP BY 1 ORDER BY 1"
    )
    assert answer.to_pylist() == [
        {"plate_read_id": each, "reads": 45} for each in sorted(made.plate_read_ids.values())
    ]


def test_times_come_as_utc(site):
    answer = run_query(site, "SELECT date::VARCHAR AS at FROM lot_history ORDER BY 1 LIMIT 1")
    assert answer.to_pylist() == [{"at": "2026-03-02 21:00:00+00"}]


@pytest.mark.parametrize(
    ("sql", "what", "remedy"),
    [
        ("SELECT lott FROM lot_latest", "there is no column 'lott' here", "did you mean lot?"),
        ("SELECT l.valu FROM lot_latest l", "there is no column 'valu' here", "did you mean value"),
        ("SELECT * FROM lot_latst", "there is no table or view 'lot_latst'", "did you mean lot_latest"),
        ("SELECT * FROM readings", "there is no table or view 'readings'", "did you mean reading"),
        ("SELECT medain(value) FROM lot_latest", "there is no function 'medain'", "did you mean median"),
        ("SELECT measured_at FROM lot_history", "there is no column 'measured_at' here", "DESCRIBE"),
        ("SELECT xyzzy FROM lot_latest", "there is no column 'xyzzy' here", "DESCRIBE"),
    ],
)
def test_a_misspelt_name_is_answered_with_the_nearest(site, closed, sql, what, remedy):
    said = refusal(closed, site, sql)
    assert said.startswith(what)
    assert remedy in said


def test_a_slip_in_the_sql_is_placed(site):
    with pytest.raises(QueryError) as refused:
        run_query(site, "SELECT *\nFROM lot_latest\nWHERE lot = = 'a'")
    assert refused.value.where == "line 3 of the query"
    assert "syntax error" in refused.value.what
    assert "\n" not in str(refused.value)


def test_without_a_publication_there_is_a_next_step(tmp_path):
    with pytest.raises(SiteError, match="halfsat overnight"):
        run_query(empty_site(tmp_path), "SELECT 1")


def test_queries_run_side_by_side_and_beside_a_reader(site):
    answers: list[int] = []
    limits = [QueryLimits(memory_mb=200), QueryLimits(memory_mb=300), QueryLimits(time_s=20)]
    with open_published(site) as connection:
        threads = [
            threading.Thread(
                target=lambda each=each: answers.append(run_query(site, "FROM lot_latest", each).num_rows)
            )
            for each in limits
        ]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        assert connection.execute("SELECT count(*) FROM lot_latest").fetchone() == (2,)
        connection.execute("CREATE TEMP TABLE mine AS SELECT 1")
    assert answers == [2, 2, 2]


def test_the_sandbox_knows_nothing_of_the_environment(site, monkeypatch):
    monkeypatch.setenv("HALFSAT_TEST_SECRET", "hunter")
    settings = run_query(site, "SELECT name, value FROM duckdb_settings()").to_pylist()
    assert "hunter" not in str(settings)
    assert os.environ["HOME"] not in str(
        [
            row
            for row in settings
            if row["name"] in ("home_directory", "secret_directory", "extension_directory")
        ]
    )


def test_the_readings_folder_is_all_that_can_be_read(site):
    settings = {
        row["name"]: row["value"]
        for row in run_query(site, "SELECT name, value FROM duckdb_settings()").to_pylist()
    }
    assert settings["allowed_directories"].strip("[]").rstrip("/") == f"{site.lake}/readings"
    assert settings["enable_external_access"] == "false"
    assert settings["lock_configuration"] == "true"
    assert settings["temp_directory"] in ("", None)
