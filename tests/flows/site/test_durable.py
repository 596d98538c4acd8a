"""Durable writes: whole or absent, with nothing left behind; and the lock of a pass."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

from flows.site import durable
from flows.site.lock import pass_lock
from models.errors import SiteError
from tests.flows.tiny_site import empty_site

ROOT = Path(__file__).resolve().parents[3]


def test_a_write_makes_its_folders_and_is_synced_in_order(tmp_path, monkeypatch):
    steps: list[str] = []
    fsync, replace = os.fsync, Path.replace

    def noted_fsync(handle):
        steps.append("fsync " + Path(f"/proc/self/fd/{handle}").readlink().suffix)
        fsync(handle)

    def noted_replace(self, target):
        steps.append("rename")
        return replace(self, target)

    (tmp_path / "a").mkdir()
    monkeypatch.setattr(os, "fsync", noted_fsync)
    monkeypatch.setattr(Path, "replace", noted_replace)
    durable.write_durably(tmp_path / "a" / "f.bin", b"new")
    assert steps == ["fsync .part", "rename", "fsync "]
    durable.write_durably(tmp_path / "b" / "c" / "f.bin", b"deep")
    assert (tmp_path / "b" / "c" / "f.bin").read_bytes() == b"deep"
    assert steps[3:5] == ["fsync ", "fsync "]


@pytest.mark.parametrize("failing", ["write", "fsync", "rename"])
def test_a_failed_write_leaves_the_old_file_and_no_part(tmp_path, monkeypatch, failing):
    path = tmp_path / "f.bin"
    durable.write_durably(path, b"old")

    def full(*_args, **_more):
        raise OSError(28, "No space left on device")

    owner, name = {"write": (Path, "write_bytes"), "fsync": (os, "fsync"), "rename": (Path, "replace")}[
        failing
    ]
    monkeypatch.setattr(owner, name, full)
    with pytest.raises(OSError, match="No space"):
        durable.write_durably(path, b"new")
    monkeypatch.undo()
    assert path.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [path]


def test_a_killed_write_leaves_a_part_that_is_swept(tmp_path):
    path = tmp_path / "deep" / "f.bin"
    durable.write_durably(path, b"old")
    script = (
        "import os, sys; from pathlib import Path; from flows.site import durable\n"
        "with durable.replacing(Path(sys.argv[1])) as part:\n"
        "    part.write_bytes(b'half'); os.kill(os.getpid(), 9)\n"
    )
    done = subprocess.run([sys.executable, "-c", script, str(path)], cwd=ROOT, check=False)
    assert done.returncode == -9
    assert path.read_bytes() == b"old"
    left = [each for each in path.parent.iterdir() if each != path]
    assert len(left) == 1
    assert durable.sweep_parts(tmp_path) == left
    assert list(path.parent.iterdir()) == [path]
    assert durable.sweep_parts(tmp_path) == []


def test_one_pass_at_a_time(tmp_path):
    site = empty_site(tmp_path)
    with (
        pass_lock(site),
        pytest.raises(SiteError, match=f"another pass is running .process {os.getpid()}"),
        pass_lock(site),
    ):
        pass
    with pass_lock(site):
        pass


def test_the_lock_is_free_when_its_holder_is_killed(tmp_path):
    site = empty_site(tmp_path)
    script = (
        "import sys, time; from pathlib import Path; from flows.site.layout import open_site\n"
        "from flows.site.lock import pass_lock\n"
        "with pass_lock(open_site(Path(sys.argv[1]))):\n"
        "    print('held', flush=True); time.sleep(60)\n"
    )
    holder = subprocess.Popen(
        [sys.executable, "-c", script, str(site.root)], cwd=ROOT, stdout=subprocess.PIPE, text=True
    )
    try:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "held\n"
        with pytest.raises(SiteError, match=f"process {holder.pid}"), pass_lock(site):
            pass
    finally:
        holder.kill()
        holder.wait()
        holder.stdout.close()
    with pass_lock(site):
        pass
