"""What one pass did, in a record that a command prints and a scheduler keeps. Holds no results."""

from __future__ import annotations

import logging
from dataclasses import dataclass
from datetime import datetime

log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Waiting:
    """A plate read that cannot be analysed yet, and what it waits for."""

    plate_id: str
    reason: str


@dataclass(frozen=True)
class PassReport:
    """What one pass of the overnight flow did.

    Attributes
    ----------
    export_count, map_count
        Files accepted in this pass.
    quarantined
        File name and reason of each file put into quarantine in this pass.
    waiting
        Plate reads without plate map or assay, whenever they came in.
    analysis_ids
        Plate reads analysed in this pass.
    plates_read
        Plates of the plate reads staged in this pass.
    held_count
        Wells and series that this pass left waiting for a person.
    gates_off
        Gates that the recipe of an analysed plate read turns off, by assay: nothing was held against them.
    """

    pass_id: str
    started_at: datetime
    finished_at: datetime
    export_count: int
    map_count: int
    quarantined: tuple[tuple[str, str], ...] = ()
    waiting: tuple[Waiting, ...] = ()
    analysis_ids: tuple[str, ...] = ()
    plates_read: tuple[str, ...] = ()
    held_count: int = 0
    gates_off: tuple[tuple[str, tuple[str, ...]], ...] = ()

    def counts(self) -> dict[str, int]:
        """The pass in numbers."""
        return {
            "exports": self.export_count,
            "plate maps": self.map_count,
            "quarantined": len(self.quarantined),
            "waiting": len(self.waiting),
            "plate reads analysed": len(self.analysis_ids),
            "held": self.held_count,
        }

    def gates_off_text(self) -> str:
        """Which gates were off, as every report of the pass says it: `blank_drift (in assay_a, assay_b)`."""
        assays_of: dict[str, dict[str, None]] = {}
        for assay, gates in self.gates_off:
            for gate in gates:
                assays_of.setdefault(gate, {})[assay] = None
        told = [f"{gate} (in {', '.join(assays)})" for gate, assays in sorted(assays_of.items())]
        return "; ".join(told) or "none"

    @property
    def nothing_new(self) -> bool:
        """Whether the pass found no new file and nothing to analyse."""
        return not (self.export_count or self.map_count or self.quarantined or self.analysis_ids)

    @property
    def needs_attention(self) -> bool:
        """Whether something was held, quarantined or left waiting."""
        return bool(self.quarantined or self.waiting or self.held_count)


def log_report(report: PassReport) -> None:
    """Log what a pass did: one line, and one for each file that it refused or new plate that has to wait."""
    for file_name, reason in report.quarantined:
        log.warning(reason, extra={"file": file_name})
    new = set(report.plates_read)
    for each in report.waiting:
        if each.plate_id in new:
            log.warning(each.reason, extra={"plate": each.plate_id})
    took_s = (report.finished_at - report.started_at).total_seconds()
    counts = {name.replace(" ", "_"): count for name, count in report.counts().items() if count}
    log.info("the pass is done", extra={"took_s": round(took_s, 3), **counts})
