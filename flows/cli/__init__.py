"""The `halfsat` command. Each subcommand lives in its own module and is imported only when it is called,
so that `--help` answers at once.
"""

from flows.cli.root import main

__all__ = ["main"]
