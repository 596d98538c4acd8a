"""The top of the command tree: which commands there are, one line each, and where each one lives.

This table is the one definition of the commands; README and help are tested against it.
"""

from __future__ import annotations

import importlib
import sys
import traceback
from dataclasses import dataclass

import click

from models.errors import HalfsatError

EXIT_DONE, EXIT_ATTENTION, EXIT_WRONG_USE, EXIT_FAILED = 0, 1, 2, 3


@dataclass(frozen=True)
class Entry:
    """A command: the line that `--help` shows, and the module below flows.cli that holds it.

    It is called `command` there, unless its name stands after a colon.
    """

    summary: str
    module: str


COMMANDS: dict[str, Entry] = {
    "demo": Entry("Make a demo site, run one night on it, and show what came out.", "demo"),
    "site": Entry("Make a site, check its configuration, try an export profile.", "site"),
    "overnight": Entry("Run one pass now: pull, stage, gate, fit, load.", "overnight"),
    "morning": Entry("Serve the review page to a browser until stopped.", "morning"),
    "serve": Entry("Run passes on the site's schedule until stopped.", "serve"),
    "gates": Entry("Show which rules ran on what, and what they found.", "gates"),
    "history": Entry("Ask the warehouse a question in SQL.", "history"),
    "lot": Entry("Hold a lot against its specification and reference.", "lot"),
    "lineage": Entry("Trace a result back to the export's bytes.", "lineage"),
    "replay": Entry("Compute results again from raw bytes and compare.", "truth:replay_command"),
    "verify": Entry("Check every hash: ledger, raw files, lake, warehouse.", "truth:verify_command"),
    "rebuild": Entry("Make lake and warehouse again from raw files and ledger.", "truth:rebuild_command"),
    "reviewer": Entry("Add, disable, list who may sign in to the review page.", "reviewer"),
}


class CommandTree(click.Group):
    """A click group that imports a command when it is called, not when it is listed."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Names in the order of the table."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Import the command of that name, or None where there is none."""
        entry = COMMANDS.get(cmd_name)
        if entry is None:
            return None
        module, _, name = entry.module.partition(":")
        loaded = getattr(importlib.import_module(f"flows.cli.{module}"), name or "command")
        if not isinstance(loaded, click.Command):
            raise TypeError(f"flows.cli.{entry.module} is no command")
        return loaded

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the list of commands without importing any of them."""
        with formatter.section("Commands"):
            formatter.write_dl([(name, entry.summary) for name, entry in COMMANDS.items()])


@click.group(
    cls=CommandTree, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80}
)
@click.version_option(package_name="halfsat", message="halfsat %(version)s")
def tree() -> None:
    """From a plate reader's exports to an enzyme lot's kinetic constants.

    Overnight, exports are staged, gated and fitted; every number can be traced back to the bytes
    that the instrument wrote.

    Exit codes: 0 done, 1 done with something held or quarantined (with --strict), 2 wrong use, 3 failed.
    """


def main() -> None:
    """Run the command line; a known error is one line on standard error and exit code 3."""
    try:
        tree.main(standalone_mode=False)
    except click.exceptions.Exit as finished:
        sys.exit(finished.exit_code)
    except click.Abort:
        click.echo("stopped", err=True)
        sys.exit(EXIT_FAILED)
    except click.ClickException as misuse:
        misuse.show()
        sys.exit(EXIT_WRONG_USE)
    except HalfsatError as error:
        click.echo(f"halfsat: {error}", err=True)
        sys.exit(EXIT_FAILED)
    except Exception:
        traceback.print_exc()
        click.echo("halfsat: this is a fault in halfsat itself; nothing that was stored is lost", err=True)
        sys.exit(EXIT_FAILED)
