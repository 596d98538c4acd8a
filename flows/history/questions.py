"""Named questions: SQL files with a head that says what they answer and which parameters they take.

A site's own stand in its configuration; those that ship with halfsat are there beside them. Parameters are
bound by the database in the sandbox and never become part of the query's text.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date
from difflib import get_close_matches
from pathlib import Path
from typing import Literal, get_args

import pyarrow as pa

from flows.site.layout import Site
from flows.site.shipped import shipped
from flows.warehouse.reader import QueryLimits, run_query
from flows.warehouse.sandbox import ParameterValue
from models.errors import ConfigurationError, QueryError

Kind = Literal["text", "lot", "assay", "integer", "number", "date"]
KINDS: tuple[str, ...] = get_args(Kind)

FOLDER = "questions"
RESERVED = frozenset({"site", "format", "output", "seconds", "list", "file", "plot", "help"})
"""Options of the command itself, which no parameter may be called."""
_LIST_THEM = "list them: halfsat history --list"
_NAME = re.compile(r"[a-z][a-z0-9]*(-[a-z0-9]+)*")
_PARAMETER = re.compile(
    r"(?P<name>[a-z][a-z0-9_]*) \((?P<kind>\w+), "
    r"(?:(?P<way>required|optional)|default (?P<default>[^)]+))\): (?P<meaning>\S.*)"
)
_ONE_PARAMETER = "NAME (KIND, required), (KIND, optional) or (KIND, default X): meaning"
_HEAD = f"begin with '-- title:', '-- answers:' and for each parameter '-- parameter: {_ONE_PARAMETER}'"
# What is no use of a parameter: text in quotes, and comments.
_QUOTED = re.compile(r"'(?:[^']|'')*'|\"(?:[^\"]|\"\")*\"|--[^\n]*")
_USE = re.compile(r"\$([a-z_][a-z0-9_]*)", re.IGNORECASE)
# Where a value of this kind stands in the warehouse, to tell a wrong name from an empty answer.
_KNOWN = {
    "lot": "SELECT DISTINCT lot FROM wells WHERE lot IS NOT NULL ORDER BY 1",
    "assay": "SELECT DISTINCT assay FROM analyses ORDER BY 1",
}


@dataclass(frozen=True)
class Parameter:
    """What a question takes.

    Attributes
    ----------
    name
        As the SQL names it, without the sign: `$lot` is `lot`.
    kind
        text, lot, assay, integer, number or date.
    required
        Whether there is no answer without it.
    default
        Value where it is left out; None for one that may be.
    meaning
        What it does, for a person.
    """

    name: str
    kind: Kind
    required: bool
    default: ParameterValue
    meaning: str

    @property
    def option(self) -> str:
        """How it is written on the command line."""
        return f"--{self.name.replace('_', '-')}"


@dataclass(frozen=True)
class Question:
    """One named question.

    Attributes
    ----------
    name
        Name of its file, without the ending.
    title, answers
        What it answers, in one line and in full.
    parameters
        In the order of the head.
    sql
        The file's text.
    own
        Whether it is the site's own.
    """

    name: str
    title: str
    answers: str
    parameters: tuple[Parameter, ...]
    sql: str
    own: bool

    @property
    def query(self) -> str:
        """The SQL without its head."""
        lines = self.sql.splitlines()
        begin = next((place for place, line in enumerate(lines) if not line.startswith("--")), len(lines))
        return "\n".join(lines[begin:]).strip()


def is_name(text: str) -> bool:
    """Whether a text is a question's name rather than SQL: one word."""
    return _NAME.fullmatch(text.strip()) is not None


def load_questions(site: Site | None) -> dict[str, Question]:
    """Every named question by name: those that ship with halfsat, and the site's own in their place.

    Raises
    ------
    ConfigurationError
        If a file has no head that can be read, or names parameters otherwise than its SQL does.
    """
    folders = [(shipped("config") / FOLDER, False)]
    if site is not None:
        folders.append((site.config / FOLDER, True))
    found = {
        path.stem: read_question(path, own)
        for folder, own in folders
        if folder.is_dir()
        for path in sorted(folder.glob("*.sql"))
    }
    return dict(sorted(found.items()))


def find_question(site: Site | None, name: str) -> Question:
    """One question by its name.

    Raises
    ------
    QueryError
        If there is none; the nearest name is suggested.
    """
    questions = load_questions(site)
    wanted = name.strip()
    if wanted not in questions:
        near = get_close_matches(wanted, questions, n=2, cutoff=0.5)
        remedy = f"did you mean {' or '.join(near)}?" if near else _LIST_THEM
        raise QueryError(f"there is no question '{wanted}'", remedy=remedy)
    return questions[wanted]


def ask(
    site: Site, question: Question, given: Mapping[str, str], limits: QueryLimits | None = None
) -> pa.Table:
    """Answer a named question.

    Parameters
    ----------
    given
        Values as a person wrote them, by parameter.
    limits
        Time and memory it may take.

    Raises
    ------
    QueryError
        If a parameter is unknown, missing or unreadable, the lot or assay asked for does not exist, or the
        query cannot be answered.
    SiteError
        If there is nothing published.
    """
    values = bind(question, given)
    answer = run_query(site, question.sql, limits, values)
    if answer.num_rows == 0:
        _refuse_unknown(site, question, values)
    return answer


def bind(question: Question, given: Mapping[str, str]) -> dict[str, ParameterValue]:
    """Values of all parameters: what was given, else their defaults.

    Raises
    ------
    QueryError
        If one is unknown, missing, or not what its kind says.
    """
    known = {parameter.name: parameter for parameter in question.parameters}
    for name in given:
        if name not in known:
            near = get_close_matches(name, known, n=1, cutoff=0.5)
            options = ", ".join(each.option for each in question.parameters) or "none"
            meant = f"did you mean {known[near[0]].option}? " if near else ""
            raise QueryError(
                f"{question.name} has no parameter '{name.replace('_', '-')}'",
                remedy=f"{meant}it takes {options}",
            )
    values: dict[str, ParameterValue] = {}
    for parameter in question.parameters:
        if parameter.name in given:
            values[parameter.name] = _read_value(parameter, given[parameter.name], question.name)
        elif parameter.required:
            raise QueryError(
                f"{question.name} needs {parameter.option}",
                remedy=f"add {parameter.option} and a value: {parameter.meaning}",
            )
        else:
            values[parameter.name] = parameter.default
    return values


def read_question(path: Path, own: bool) -> Question:
    """One file as a question.

    The head is the comment lines before the SQL: `-- title:`, `-- answers:` and one `-- parameter:` for each
    parameter. A line that begins with more than one space after the dashes goes on with what stands above it.

    Raises
    ------
    ConfigurationError
        If the file has no such head, or its parameters are not those that its SQL uses.
    """
    where = f"{FOLDER}/{path.name}"
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except (UnicodeDecodeError, OSError) as flaw:
        raise ConfigurationError(
            f"the file cannot be read: {flaw}", where=where, remedy="save it as UTF-8"
        ) from flaw
    if not is_name(path.stem):
        raise ConfigurationError(
            f"'{path.stem}' is no name for a question",
            where=where,
            remedy="use small letters, digits and hyphens, such as lot-trend.sql",
        )
    head = _head(text, where)
    titles, answers = head["title"], head["answers"]
    if len(titles) != 1 or len(answers) != 1:
        raise ConfigurationError("title and answers stand once each in the head", where=where, remedy=_HEAD)
    parameters = tuple(_read_parameter(line, where) for line in head["parameter"])
    used = set(_USE.findall(_QUOTED.sub(" ", text)))
    told = [parameter.name for parameter in parameters]
    if set(told) != used or len(told) != len(used):
        odd = ", ".join(sorted(set(told) ^ used)) or "one parameter twice"
        raise ConfigurationError(
            f"head and SQL name other parameters: {odd}",
            where=where,
            remedy="each $name of the SQL has one '-- parameter: name' in the head, and no other is there",
        )
    return Question(path.stem, titles[0], answers[0], parameters, text, own)


def _head(text: str, where: str) -> dict[str, list[str]]:
    head: dict[str, list[str]] = {"title": [], "answers": [], "parameter": []}
    last: list[str] | None = None
    for number, line in enumerate(text.splitlines(), start=1):
        if not line.startswith("--"):
            break
        content = line[2:]
        if last is not None and content.startswith("  "):
            last[-1] = f"{last[-1]} {content.strip()}"
            continue
        key, colon, value = content.strip().partition(":")
        if not colon or key not in head or not value.strip():
            raise ConfigurationError(
                f"'{line}' is no line of a head", where=f"{where}, line {number}", remedy=_HEAD
            )
        last = head[key]
        last.append(value.strip())
    return head


def _read_parameter(line: str, where: str) -> Parameter:
    found = _PARAMETER.fullmatch(line)
    if found is None or found["kind"] not in KINDS:
        kinds = ", ".join(KINDS)
        raise ConfigurationError(
            f"'{line}' describes no parameter",
            where=where,
            remedy=f"write {_ONE_PARAMETER}; kinds are {kinds}",
        )
    name = found["name"]
    if name in RESERVED:
        raise ConfigurationError(
            f"a parameter cannot be called '{name}'",
            where=where,
            remedy="the command has an option of that name",
        )
    kind: Kind = next(each for each in get_args(Kind) if each == found["kind"])
    bare = Parameter(name, kind, found["way"] == "required", None, found["meaning"])
    if found["default"] is None:
        return bare
    try:
        default = _read_value(bare, found["default"], where)
    except QueryError as flaw:
        raise ConfigurationError(flaw.what, where=where, remedy=flaw.remedy) from flaw
    return Parameter(name, kind, False, default, found["meaning"])


def _read_value(parameter: Parameter, text: str, where: str) -> ParameterValue:
    """A value as its kind says; only its type is checked, the database is given it as it is."""
    written = text.strip()
    try:
        if parameter.kind == "integer":
            return int(written)
        if parameter.kind == "number":
            value = float(written)
            if not math.isfinite(value):
                raise ValueError
            return value
        if parameter.kind == "date":
            return date.fromisoformat(written).isoformat()
    except ValueError as unreadable:
        wanted = {
            "integer": "a whole number, such as 10",
            "number": "a number, such as 2.5",
            "date": "a day, such as 2026-01-15",
        }[parameter.kind]
        raise QueryError(
            f"{parameter.option} of {where} is '{written}'", remedy=f"write {wanted}"
        ) from unreadable
    return text


def _refuse_unknown(site: Site, question: Question, values: Mapping[str, ParameterValue]) -> None:
    for parameter in question.parameters:
        value = values[parameter.name]
        if parameter.kind not in _KNOWN or not isinstance(value, str):
            continue
        names = [str(name) for name in run_query(site, _KNOWN[parameter.kind])[0].to_pylist()]
        if value not in names:
            near = get_close_matches(value, names, n=2, cutoff=0.5)
            some = ", ".join(names[:8]) + (" ..." if len(names) > 8 else "")
            remedy = f"did you mean {' or '.join(near)}?" if near else f"there are {some or 'none yet'}"
            raise QueryError(f"there is no {parameter.kind} '{value}'", remedy=remedy)
