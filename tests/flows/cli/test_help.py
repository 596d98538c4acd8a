"""Help answers within half a second: no command's `--help` imports what takes long."""

from __future__ import annotations

import subprocess
import sys

from flows.cli.root import COMMANDS

ASK_ALL = """
import sys
import click
from click.testing import CliRunner
from flows.cli.root import tree

HEAVY = {"numpy", "pandas", "scipy", "pyarrow", "duckdb", "pydantic", "matplotlib", "pint", "jinja2",
         "openpyxl", "rich", "prefect", "great_expectations", "fastapi", "apprise", "distributed"}


def ask(command, words):
    done = CliRunner().invoke(tree, [*words, "--help"])
    assert done.exit_code == 0, (words, done.output)
    found = HEAVY & set(sys.modules)
    assert not found, f"halfsat {' '.join(words)} --help imports {', '.join(sorted(found))}"
    print(" ".join(words))
    if isinstance(command, click.Group):
        for name in command.list_commands(click.Context(command)):
            ask(command.get_command(click.Context(command), name), [*words, name])


ask(tree, [])
"""


def test_help_of_no_command_imports_what_takes_long() -> None:
    done = subprocess.run([sys.executable, "-c", ASK_ALL], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    asked = done.stdout.split("\n")
    assert set(COMMANDS) <= set(asked)
    assert {"site new", "site check", "site try-profile", "site schemas", "site prove"} <= set(asked)
