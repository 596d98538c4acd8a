"""A database's refusal in plain words: what is wrong, where, and the nearest name there is."""

from __future__ import annotations

import difflib
import json
import re
from collections.abc import Callable, Sequence

from flows.warehouse.bookkeeping import STORED
from flows.warehouse.sandbox import Failure
from flows.warehouse.view import View
from flows.warehouse.views import RESULT_VIEWS
from models.errors import QueryError
from models.tables import Table

_ONE_SELECT = "ask with one SELECT; to see what there is to ask, type: SHOW TABLES"
_WHERE_LISTED = "DESCRIBE and a table's name lists its columns; SHOW TABLES lists the tables"
_SIGNS_OF_CLOSED = (
    "disabled by configuration",
    "configuration has been locked",
    "read-only mode",
    "No extension found",
    " extension.",
)
_DECLARED: tuple[Table | View, ...] = (*STORED, *RESULT_VIEWS)
_COLUMNS = sorted({column.name for each in _DECLARED for column in each.columns})
_CLOSED = "a query reads the warehouse only: no files, network, settings or extensions"


def explain(errors: bytes, time_s: float, memory_mb: int, names: Sequence[str]) -> QueryError:
    """Say why the sandbox gave no answer.

    Parameters
    ----------
    errors
        What it wrote to standard error: its last line is a `Failure`, unless its memory limit ended it.
    names
        Every table and view.
    """
    try:
        failure: Failure = json.loads(errors.decode(errors="replace").rstrip().rpartition("\n")[2])
        text, kind = failure["text"], failure["kind"]
    except (ValueError, KeyError, TypeError):
        return _too_large(memory_mb)
    if kind == "statements":
        what = "there is no query" if text == "0" else f"there are {text} statements"
        return QueryError(what, remedy=_ONE_SELECT)
    if kind == "not_select":
        return QueryError("only SELECT is answered here", remedy=_ONE_SELECT)
    if kind == "memory" or "arrow_large_buffer_size" in text or "bad_alloc" in text:
        return _too_large(memory_mb)
    if kind == "nesting" or "expression depth" in text:
        return QueryError("the query is nested too deeply", remedy="write it in steps, with WITH")
    if failure["error"] == "InterruptException" or "maximum execution time" in text:
        return too_slow(time_s)
    return _explain_database(failure["error"], text, names)


def too_slow(time_s: float) -> QueryError:
    """What is said of a query that ran out of time."""
    return QueryError(f"the query took longer than {time_s:g} s", remedy="ask for less, or add a LIMIT")


def _too_large(memory_mb: int) -> QueryError:
    what = f"the query needs more than {memory_mb} MB of memory"
    return QueryError(what, remedy="ask for less, or add a LIMIT")


def _explain_database(error: str, text: str, names: Sequence[str]) -> QueryError:
    if error == "PermissionException" or any(sign in text for sign in _SIGNS_OF_CLOSED):
        return QueryError(_CLOSED, remedy=_ONE_SELECT)
    for pattern, say in _MISSING:
        found = re.search(pattern, text)
        if found:
            wanted = next(part for part in found.groups() if part)
            return say(wanted, text, names)
    first, _, rest = text.partition("\n")
    plain = re.sub(r"^(\w+ )+Error: ", "", first)
    place = re.search(r"LINE (\d+):", rest)
    return QueryError(plain, where=f"line {place[1]} of the query" if place else "")


def _no_column(wanted: str, text: str, _: Sequence[str]) -> QueryError:
    return QueryError(
        f"there is no column '{wanted}' here", remedy=_nearest(wanted, _candidates(text) or _COLUMNS)
    )


def _no_table(wanted: str, text: str, names: Sequence[str]) -> QueryError:
    if re.search(r"[/\\:]|\.\w+$", wanted):
        return QueryError(_CLOSED, remedy=_ONE_SELECT)
    return QueryError(
        f"there is no table or view '{wanted}'", remedy=_nearest(wanted, [*names, *_candidates(text)])
    )


def _no_function(wanted: str, text: str, _: Sequence[str]) -> QueryError:
    return QueryError(f"there is no function '{wanted}'", remedy=_nearest(wanted, _candidates(text)))


_MISSING: tuple[tuple[str, Callable[[str, str, Sequence[str]], QueryError]], ...] = (
    (r'Referenced column "(.+?)" not found|does not have a column named "(.+?)"', _no_column),
    (r"Table with name (.+?) does not exist", _no_table),
    (r"Function with name (.+?) does not exist", _no_function),
)


def _candidates(text: str) -> list[str]:
    hints = [line for line in text.splitlines() if line.startswith(("Candidate bindings", "Did you mean"))]
    return [name.rpartition(".")[2] for line in hints for name in re.findall(r'"(.+?)"', line)]


def _nearest(wanted: str, names: Sequence[str]) -> str:
    close = difflib.get_close_matches(wanted.lower(), list(dict.fromkeys(names)), n=2, cutoff=0.6)
    return f"did you mean {' or '.join(close)}?" if close else _WHERE_LISTED
