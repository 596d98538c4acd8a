"""Writes that are whole or absent after a power failure: temporary file, fsync, rename, fsync of the folder.

Knows bytes and paths only.
"""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

PART_SUFFIX = ".part"


def write_durably(path: Path, content: bytes, *, mode: int = 0o644) -> None:
    """Write a file so that it is there completely or not at all.

    Missing folders above it are made. An existing file is replaced in one step.

    Parameters
    ----------
    path
        Where the file goes.
    content
        All its bytes.
    mode
        Permissions of the finished file.

    Raises
    ------
    OSError
        If it cannot be written, such as on a full disk. The old file is then as it was and no part is left.
    """
    with replacing(path, mode=mode) as part:
        part.write_bytes(content)


@contextmanager
def replacing(path: Path, *, mode: int = 0o644) -> Iterator[Path]:
    """Give a temporary path beside `path`; what is written there takes its place when the block ends well."""
    make_folder(path.parent)
    handle, name = tempfile.mkstemp(prefix=f".{path.name[:80]}.", suffix=PART_SUFFIX, dir=path.parent)
    os.close(handle)
    part = Path(name)
    try:
        yield part
        part.chmod(mode)
        sync_file(part)
        part.replace(path)
    except BaseException:
        with suppress(FileNotFoundError):
            part.unlink()
        raise
    sync_folder(path.parent)


def make_folder(folder: Path) -> None:
    """Make a folder and those above it, each made known to the disk."""
    if folder.is_dir():
        return
    make_folder(folder.parent)
    folder.mkdir(exist_ok=True)
    sync_folder(folder.parent)


def sync_file(path: Path) -> None:
    """Wait until a file's bytes are on the disk."""
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def sync_folder(folder: Path) -> None:
    """Wait until the names in a folder are on the disk."""
    handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def sweep_parts(folder: Path) -> list[Path]:
    """Delete what killed writes left in a folder and below it; only while nobody else writes there.

    Returns
    -------
    list of Path
        The files that were deleted.
    """
    left = sorted(path for path in folder.rglob(f".*{PART_SUFFIX}") if path.is_file())
    for path in left:
        path.unlink()
    return left
