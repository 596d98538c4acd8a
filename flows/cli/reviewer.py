"""`halfsat reviewer`: who may sign in to the review page.

A password is asked for or read from standard input, never given as an argument, and never shown.
"""

from __future__ import annotations

import getpass
import sys
from datetime import UTC, datetime
from pathlib import Path

import click

from flows.cli.options import site_option
from flows.site.layout import open_site

ROLE_NAMES = ("reader", "reviewer", "approver")

_from_stdin = click.option(
    "--password-stdin", is_flag=True, help="Read the password from the first line of standard input."
)


@click.group("reviewer")
def command() -> None:
    """Add, disable and list those who may sign in to the review page.

    Names are never given twice, and what a person signed stays when the account is disabled.
    """


@command.command("add")
@click.argument("name")
@click.option("--full-name", required=True, help="As it stands beside a signature.")
@click.option(
    "--role",
    type=click.Choice(ROLE_NAMES),
    default="reviewer",
    show_default=True,
    help="reader looks, reviewer decides and signs, approver also signs second.",
)
@_from_stdin
@site_option
def add(name: str, full_name: str, role: str, password_stdin: bool, site_dir: Path) -> None:
    """Add the person NAME; asks for the password twice.

    At least 12 characters, not the name, and not easy to guess.
    """
    from flows.site.reviewers import ROLES, add_reviewer

    site = open_site(site_dir)
    chosen = next(each for each in ROLES if each == role)
    added = add_reviewer(
        site, name, full_name, chosen, _password(password_stdin), datetime.now(UTC), actor=_operator()
    )
    click.echo(f"added {added.name} ({added.full_name}), {added.role}")


@command.command("disable")
@click.argument("name")
@site_option
def disable(name: str, site_dir: Path) -> None:
    """Let NAME sign in no more."""
    from flows.site.reviewers import disable_reviewer

    disable_reviewer(open_site(site_dir), name, datetime.now(UTC), actor=_operator())
    click.echo(f"disabled {name}; what was signed stays")


@command.command("reset")
@click.argument("name")
@_from_stdin
@site_option
def reset(name: str, password_stdin: bool, site_dir: Path) -> None:
    """Give NAME a new password; asks for it twice."""
    from flows.site.reviewers import reset_password

    site = open_site(site_dir)
    reset_password(site, name, _password(password_stdin), datetime.now(UTC), actor=_operator())
    click.echo(f"new password for {name}")


@command.command("list")
@site_option
def show(site_dir: Path) -> None:
    """List everybody who was added."""
    from flows.cli.tables import console, plain_table
    from flows.site.reviewers import reviewers

    found = reviewers(open_site(site_dir))
    if not found:
        click.echo("nobody yet; type: halfsat reviewer add NAME --full-name '...'")
        return
    rows = [
        (
            each.name,
            each.full_name,
            each.role,
            "disabled" if each.disabled else "",
            f"{each.added_at:%Y-%m-%d}",
        )
        for each in found
    ]
    headings = ("name", "full name", "role", "", "added (UTC)")
    console().print(plain_table([(heading, "left") for heading in headings], rows))


def _password(from_stdin: bool) -> str:
    if from_stdin:
        return sys.stdin.readline().rstrip("\r\n")
    answer: str = click.prompt("password", hide_input=True, confirmation_prompt=True)
    return answer


def _operator() -> str:
    """Account of the machine under which the command runs."""
    try:
        return getpass.getuser()
    except (KeyError, OSError):
        return "halfsat"
