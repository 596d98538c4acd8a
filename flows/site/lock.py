"""One pass at a time: a lock on the site that the kernel frees at once when its holder dies.

Knows nothing of what a pass does.
"""

from __future__ import annotations

import fcntl
import os
from collections.abc import Iterator
from contextlib import contextmanager

from flows.site.layout import Site
from models.errors import SiteBusy


@contextmanager
def pass_lock(site: Site) -> Iterator[None]:
    """Hold the site while a pass writes.

    Raises
    ------
    SiteBusy
        If another pass holds it, in this process or another.
    """
    handle = os.open(site.lock_file, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
    try:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as error:
            holder = os.read(handle, 32).decode(errors="replace").strip()
            raise SiteBusy(
                f"another pass is running{f' (process {holder})' if holder else ''}",
                where=str(site.root),
                remedy="wait until it has finished",
            ) from error
        os.ftruncate(handle, 0)
        os.write(handle, f"{os.getpid()}\n".encode())
        yield
    finally:
        os.close(handle)


def is_held(site: Site) -> bool:
    """Whether a pass holds the site now, in this process or another."""
    try:
        with pass_lock(site):
            return False
    except SiteBusy:
        return True
