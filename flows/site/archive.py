"""The raw archive, where every accepted file lies under its SHA-256, and the quarantine beside it.

Knows bytes only: whether they are an export or a plate map is found out later.
"""

from __future__ import annotations

import re
from contextlib import suppress
from pathlib import Path
from typing import Literal

from flows.site.durable import write_durably
from flows.site.layout import Site
from models.errors import SiteError
from models.identity import content_id

Condition = Literal["unchanged", "changed", "missing"]

REASON_SUFFIX = ".reason.txt"
_READ_ONLY = 0o444


def raw_path(site: Site, file_id: str) -> Path:
    """Where the bytes with this SHA-256 lie in the archive."""
    return site.raw / file_id[:2] / file_id


def keep(site: Site, content: bytes) -> str:
    """Put bytes into the archive and return their SHA-256.

    Bytes that are there already are left alone; a damaged copy of them is replaced.
    """
    file_id = content_id(content)
    path = raw_path(site, file_id)
    try:
        whole = path.read_bytes() == content
    except FileNotFoundError:
        whole = False
    if not whole:
        write_durably(path, content, mode=_READ_ONLY)
    return file_id


def fetch(site: Site, file_id: str) -> bytes:
    """Return archived bytes after checking that they still have their hash.

    Raises
    ------
    SiteError
        If the file is missing, or its bytes have changed since they were accepted.
    """
    try:
        content = raw_path(site, file_id).read_bytes()
    except FileNotFoundError as error:
        raise SiteError(
            f"the raw file {file_id[:12]} is missing",
            where=str(site.raw),
            remedy="bring raw/ back from a backup of the site",
        ) from error
    if content_id(content) != file_id:
        raise SiteError(
            f"the raw file {file_id[:12]} has changed since it was accepted",
            where=str(raw_path(site, file_id)),
            remedy="bring it back from a backup of the site, or drop the original into the inbox again",
        )
    return content


def condition(site: Site, file_id: str) -> Condition:
    """Whether archived bytes are as they were accepted."""
    try:
        content = raw_path(site, file_id).read_bytes()
    except FileNotFoundError:
        return "missing"
    return "unchanged" if content_id(content) == file_id else "changed"


def quarantine(site: Site, content: bytes, file_name: str, reason: str) -> Path:
    """Put a file that cannot be read aside, with the reason in plain text beside it.

    Parameters
    ----------
    content, file_name
        The file as it came. Its name is cut down to plain characters, led by the first 12 digits of its hash.
    reason
        Why it cannot be read, and what to do about it.

    Returns
    -------
    Path
        Where the bytes are now.
    """
    file_id = content_id(content)
    path = _quarantine_path(site, file_id, file_name)
    shown = file_name.encode("unicode_escape").decode()
    note = f"{reason}\n\nfile: {shown}\nsize: {len(content)} byte\nSHA-256: {file_id}\n"
    write_durably(path, content)
    write_durably(path.with_name(path.name + REASON_SUFFIX), note.encode(errors="backslashreplace"))
    return path


def release(site: Site, file_id: str) -> None:
    """Take a file and its reason out of quarantine; its bytes stay in the archive."""
    for path in site.quarantine.glob(f"{file_id[:12]}_*"):
        with suppress(FileNotFoundError):
            path.unlink()


def _quarantine_path(site: Site, file_id: str, file_name: str) -> Path:
    plain = re.sub(r"[^A-Za-z0-9._-]+", "_", re.split(r"[\\/]", file_name)[-1])[-80:].lstrip(".") or "file"
    return site.quarantine / f"{file_id[:12]}_{plain}"
