"""The wheel carries all that the commands need: code, working configuration and the demo's scenario."""

from __future__ import annotations

import subprocess
import sys
import zipfile
from importlib.metadata import version
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
DIST_INFO = f"halfsat-{version('halfsat')}.dist-info"


@pytest.fixture(scope="module")
def unpacked(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The wheel built from this checkout, unpacked where no checkout is near."""
    folder = tmp_path_factory.mktemp("wheel")
    words = ["-m", "build", "--wheel", "--no-isolation", "--outdir", str(folder), str(ROOT)]
    built = subprocess.run([sys.executable, *words], capture_output=True, text=True, check=False)
    assert built.returncode == 0, built.stdout + built.stderr
    (wheel,) = folder.glob("halfsat-*.whl")
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(folder / "installed")
    return folder / "installed"


def test_the_wheel_holds_code_configuration_and_demo_and_nothing_else(unpacked: Path) -> None:
    assert {path.name for path in unpacked.iterdir()} == {
        "models",
        "checks",
        "flows",
        DIST_INFO,
    }
    shipped = unpacked / "flows" / "shipped"
    for part in ("config", "fixtures/demo"):
        there = {p.relative_to(shipped / part) for p in (shipped / part).rglob("*") if p.is_file()}
        here = {p.relative_to(ROOT / part) for p in (ROOT / part).rglob("*") if p.is_file()}
        assert there == here
    scripts = (unpacked / DIST_INFO / "entry_points.txt").read_text()
    assert "halfsat = flows.cli:main" in scripts


def test_a_site_is_made_from_the_wheel_alone(unpacked: Path, tmp_path: Path) -> None:
    code = f"import sys; sys.path.insert(0, {str(unpacked)!r}); from flows.cli import main; main()"
    for words in (["site", "new", "site"], ["site", "check", "--site", "site"]):
        done = subprocess.run(
            [sys.executable, "-P", "-c", code, *words],
            cwd=tmp_path,
            capture_output=True,
            text=True,
            check=False,
        )
        assert done.returncode == 0, done.stderr
    assert (tmp_path / "site" / "config" / "gates.toml").is_file()
