"""The last step of a pass: the warehouse as it now is goes before its readers."""

from __future__ import annotations

from datetime import datetime

from flows import ledger
from flows.site.layout import Site
from flows.warehouse import writer
from flows.warehouse.writer import Published
from models.identity import Json


def publish_results(site: Site, now: datetime) -> Published:
    """Publish the warehouse and record the copy's hash; nothing happens where nothing has changed.

    Killed before the link is replaced, readers keep the old copy; killed before the ledger's line, the next
    publication finds the copy unrecorded and records it.

    Raises
    ------
    SiteError
        If the warehouse cannot be opened.
    """
    copy = writer.publish(site)
    recorded = [entry.body.get("sha256") for entry in ledger.entries(site) if entry.kind == "published"]
    if not recorded or recorded[-1] != copy.sha256:
        body: dict[str, Json] = {"file": copy.path.name, "sha256": copy.sha256, "byte_count": copy.byte_count}
        ledger.append(site, "published", body, at=now)
    return copy
