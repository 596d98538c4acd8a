"""`halfsat history`: SQL, or a named question, on the published warehouse."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import click
from click.core import ParameterSource

from flows.cli.options import site_option
from flows.history.formats import FILE_FORMATS
from flows.site.layout import Site, open_site
from models.errors import QueryError, SiteError

if TYPE_CHECKING:
    from rich.console import Console

    from flows.history.questions import Question


@click.command(
    "history",
    context_settings={"ignore_unknown_options": True},
    options_metavar="[OPTIONS] [--PARAMETER VALUE]...",
)
@click.argument("question", metavar="SQL|QUESTION", required=False)
@click.argument("given", nargs=-1, type=click.UNPROCESSED, metavar="")
@site_option
@click.option(
    "--list", "list_them", is_flag=True, help="List the named questions; with a name, what it takes and asks."
)
@click.option(
    "--format",
    "output_format",
    type=click.Choice(["table", *FILE_FORMATS]),
    default="table",
    show_default=True,
    help="How the answer is written.",
)
@click.option(
    "--output",
    type=click.Path(dir_okay=False, path_type=Path),
    help="File to write to instead of the terminal; needed for parquet and xlsx.",
)
@click.option(
    "--seconds", type=click.FloatRange(0.1, 3600), default=30.0, show_default=True, help="Longest run."
)
@click.pass_context
def command(
    ctx: click.Context,
    question: str | None,
    given: tuple[str, ...],
    site_dir: Path,
    list_them: bool,
    output_format: str,
    output: Path | None,
    seconds: float,
) -> None:
    """Ask the warehouse a question: in SQL, or a named one.

    SQL is one SELECT over the published copy of the warehouse: no files, no network, no settings. Tables and
    views are described in flows/warehouse/TABLES.md; "show tables" lists them.

    A named question is one word, and takes parameters: lot-trend --lot AP-2601. They are SQL files in the
    site's config/questions, and those that ship with halfsat.
    """
    if list_them:
        _list(_site_if_any(ctx, site_dir), question)
        return
    if question is None:
        raise click.UsageError("write a question in SQL, or the name of one: --list shows them")
    if question.startswith("--"):
        raise click.UsageError(
            f"there is no option '{question}'; a question's name stands before its parameters"
        )
    from flows.cli.tables import console
    from flows.history.output import encode, print_answer
    from flows.history.questions import ask, bind, find_question, is_name
    from flows.warehouse.reader import QueryLimits, run_query

    site, limits = open_site(site_dir), QueryLimits(time_s=seconds)
    if is_name(question):
        named = find_question(site, question)
        values = _values(given)
        try:
            bind(named, values)
        except QueryError as misuse:
            raise click.UsageError(str(misuse)) from misuse
        answer = ask(site, named, values, limits)
    elif given:
        raise click.UsageError(f"SQL takes no parameters, and here stands '{given[0]}' (write it in quotes)")
    else:
        answer = run_query(site, question, limits)
    if output_format == "table":
        print_answer(answer, console())
        return
    content = encode(answer, output_format)
    if output is not None:
        output.write_bytes(content)
        click.echo(f"{answer.num_rows} rows in {output}")
    elif output_format in ("parquet", "xlsx"):
        raise click.UsageError(f"{output_format} is no text: name a file with --output")
    else:
        click.echo(content.decode(), nl=False)


def _values(given: Sequence[str]) -> dict[str, str]:
    """`--lot QX-7` or `--lot=QX-7`, as values by parameter."""
    values: dict[str, str] = {}
    rest = list(given)
    while rest:
        word = rest.pop(0)
        if not word.startswith("--") or word == "--":
            raise click.UsageError(f"'{word}' belongs to no parameter: write --name and a value")
        option, equals, value = word[2:].partition("=")
        if not equals:
            if not rest:
                raise click.UsageError(f"--{option} needs a value")
            value = rest.pop(0)
        name = option.replace("-", "_")
        if name in values:
            raise click.UsageError(f"--{option} stands twice")
        values[name] = value
    return values


def _site_if_any(ctx: click.Context, site_dir: Path) -> Site | None:
    """The site; None where none was named and the current folder is none."""
    try:
        return open_site(site_dir)
    except SiteError:
        if ctx.get_parameter_source("site_dir") is ParameterSource.DEFAULT:
            return None
        raise


def _list(site: Site | None, name: str | None) -> None:
    from rich.text import Text

    from flows.cli.tables import console, plain_table
    from flows.history.questions import find_question, load_questions

    screen = console()
    if name is not None:
        _show(screen, find_question(site, name))
        return
    questions = load_questions(site).values()
    rows = [
        (each.name, each.title, ", ".join(p.option for p in each.parameters if p.required))
        for each in questions
    ]
    screen.print(plain_table([("question", "left"), ("answers", "left"), ("needs", "left")], rows))
    screen.print(Text("halfsat history --list NAME tells what it takes", style="dim"))


def _show(screen: Console, question: Question) -> None:
    from rich.text import Text

    from flows.cli.tables import heading, plain_table

    heading(screen, f"{question.name}: {question.title}")
    screen.print(Text(question.answers))
    screen.print()
    rows = [
        (each.option, each.kind, _way(each.required, each.default), each.meaning)
        for each in question.parameters
    ]
    if rows:
        names = [("parameter", "left"), ("kind", "left"), ("left out", "left"), ("meaning", "left")]
        screen.print(plain_table(names, rows))
    screen.print(Text(question.query, style="dim"), soft_wrap=True)


def _way(required: bool, default: object) -> str:
    if required:
        return "not allowed"
    return "–" if default is None else str(default)
