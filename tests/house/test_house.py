"""The house keeps its own rules: rooms, directions, types, lint, and documents that name what is there."""

from __future__ import annotations

import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pint
import pytest

from flows.cli.root import COMMANDS, tree
from models.tables import TABLES, Column

ROOT = Path(__file__).resolve().parents[2]
TRACKED = [
    Path(line)
    for line in subprocess.run(
        ["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True
    ).stdout.splitlines()
]
ALL_COLUMNS = [(table.name, column) for table in TABLES for column in table.columns]


def run_tool(*words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", *words], cwd=ROOT, capture_output=True, text=True, check=False
    )


@pytest.mark.parametrize(
    "words",
    [
        ("ruff", "check", "."),
        ("ruff", "format", "--check", "."),
        ("mypy",),
    ],
    ids=["lint", "format", "types"],
)
def test_tools_find_nothing(words: tuple[str, ...]) -> None:
    done = run_tool(*words)
    assert done.returncode == 0, done.stdout + done.stderr


def test_imports_go_one_way() -> None:
    done = subprocess.run(
        [sys.executable, "-c", "from importlinter.cli import lint_imports_command as c; c()"],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert "0 broken" in done.stdout


def test_top_level_is_the_agreed_one() -> None:
    rooms = {"README.md", "DEVELOPERS.md", "pyproject.toml", "flows", "checks", "models", "tests", "config"}
    beside = {"fixtures", "LICENSE", "CHANGELOG.md", "pins.txt"}
    visible = {path.parts[0] for path in TRACKED if not path.parts[0].startswith(".")}
    assert visible == rooms | beside


def test_no_module_grows_past_its_seam() -> None:
    lengths = {path: len((ROOT / path).read_text().splitlines()) for path in TRACKED if path.suffix == ".py"}
    most = {path: 500 if path.parts[0] == "tests" else 450 for path in lengths}
    assert {path: length for path, length in lengths.items() if length > most[path]} == {}


def test_every_package_says_what_it_is_for() -> None:
    modules = [p for p in TRACKED if p.suffix == ".py" and p.parts[0] in ("flows", "checks", "models")]
    silent = [str(p) for p in modules if not (ROOT / p).read_text().lstrip().startswith('"""')]
    assert silent == []


def test_help_lists_every_command_without_importing_one() -> None:
    code = (
        "import sys; sys.argv = ['halfsat', '--help']\n"
        "from flows.cli import main\n"
        "try: main()\n"
        "except SystemExit as done: assert done.code in (0, None)\n"
        "heavy = {'pandas', 'scipy', 'duckdb', 'prefect', 'great_expectations', 'pyarrow', 'pydantic'}\n"
        "assert not heavy & set(sys.modules), heavy & set(sys.modules)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    for name, entry in COMMANDS.items():
        assert re.search(rf"^  {name} ", done.stdout, re.MULTILINE), name
        assert len(entry.summary) <= 66


@pytest.mark.parametrize("name", COMMANDS)
def test_readme_names_every_command(name: str) -> None:
    assert f"halfsat {name}" in (ROOT / "README.md").read_text()
    assert tree.get_command(tree.make_context("halfsat", ["demo"]), name) is not None


def test_readme_has_exactly_two_one_line_set_up_commands() -> None:
    readme = (ROOT / "README.md").read_text()
    blocks = re.findall(r"<!-- (\w+) -->\n```sh\n(.*?)\n```", readme, re.DOTALL)
    assert [name for name, _ in blocks] == ["demo", "tests"]
    assert all("\n" not in command for _, command in blocks)


@pytest.mark.parametrize(("table_name", "column"), ALL_COLUMNS, ids=lambda part: getattr(part, "name", part))
def test_units_parse_and_stand_in_the_name(table_name: str, column: Column) -> None:
    endings = {
        "umol/L/s": "_um_per_s",
        "1/s": "_per_s",
        "umol/L": "_um",
        "nmol/L": "_nm",
        "ng/mL": "_ng_per_ml",
        "s": "_s",
        "degC": "_c",
        "byte": "_count",
    }
    if column.unit is not None:
        pint.get_application_registry().Unit(column.unit)
        assert column.unit == "1" or column.name.endswith(endings[column.unit]), table_name
    for ending in ("_um", "_um_per_s", "_nm", "_s", "_c"):
        if column.name.endswith(ending):
            assert column.unit is not None


def test_same_name_means_the_same_everywhere() -> None:
    first: dict[str, Column] = {}
    for table_name, column in ALL_COLUMNS:
        other = first.setdefault(column.name, column)
        assert (other.kind, other.unit) == (column.kind, column.unit), (table_name, column.name)


def test_pins_are_a_plain_list_that_names_every_dependency() -> None:
    pins = (ROOT / "pins.txt").read_text().splitlines()
    assert all(re.fullmatch(r"[A-Za-z0-9_.\-]+==[A-Za-z0-9_.\-+!]+", pin) for pin in pins)
    pinned = {re.sub(r"[-_.]+", "-", pin.split("==")[0]).lower() for pin in pins}
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    needed = [*project["dependencies"], *project["optional-dependencies"]["dev"]]
    names = {re.split(r"[<>=!~\[ ]", need)[0].lower().replace("_", "-") for need in needed}
    assert names <= pinned
