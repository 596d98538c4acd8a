"""Hold the rates against the gates and say which wells stand.

The rules are in `checks`; this stage hands them the frames and keeps what they say.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from checks.assess import assess
from checks.gates.gate import STANDARD_COLUMNS, GateInput, no_standards
from checks.verdicts import well_standings, without_consequences
from flows.stages.work import GatedBatch, PlateWork, RatedBatch
from models.plates import smallest_format, well_position


def gate_batch(rated: RatedBatch) -> GatedBatch:
    """Assess wells and plate reads of a batch and set each well's standing.

    Parameters
    ----------
    rated
        The batch with the rate of every well.

    Returns
    -------
    GatedBatch
        Findings without those that only follow from another, and wells with `standing`.
    """
    assessment = assess("wells", gate_input(rated), limits_by_recipe(rated.plates))
    findings = without_consequences(assessment.findings)
    wells = rated.wells.assign(standing=well_standings(rated.wells, findings))
    return GatedBatch(rated, wells, findings, assessment.runs, assessment.metrics)


def gate_input(rated: RatedBatch, **fitted: pd.DataFrame | None) -> GateInput:
    """Frames of a batch as the gates want them; those of what is fitted only once there are any."""
    analyses = pd.DataFrame(
        {
            "analysis_id": [work.analysis_id for work in rated.plates],
            "recipe_id": [work.recipe.recipe_id for work in rated.plates],
            "assay": [work.recipe.assay_name for work in rated.plates],
        }
    )
    return GateInput(
        analyses=analyses,
        wells=rated.wells,
        readings=rated.reads,
        rates=rated.rates,
        plate_reads=pd.DataFrame([_plate_read(work) for work in rated.plates]),
        standards=_standards(rated.plates),
        assays={work.recipe.recipe_id: work.recipe.assay for work in rated.plates},
        **fitted,
    )


def _plate_read(work: PlateWork) -> dict[str, object]:
    temperature_c = work.readings["temperature_c"].to_numpy(dtype=float)
    reported = temperature_c[np.isfinite(temperature_c)]
    positions = [well_position(well) for well in {*work.readings["well"].unique(), *work.wells["well"]}]
    return {
        "analysis_id": work.analysis_id,
        "plate_format": smallest_format(positions).well_count,
        "temperature_low_c": reported.min(initial=np.inf) if reported.size else np.nan,
        "temperature_high_c": reported.max(initial=-np.inf) if reported.size else np.nan,
    }


def _standards(plates: Sequence[PlateWork]) -> pd.DataFrame:
    parts = [work.conversion.standards.assign(analysis_id=work.analysis_id) for work in plates]
    stated = [part for part in parts if len(part)]
    return pd.concat(stated, ignore_index=True)[list(STANDARD_COLUMNS)] if stated else no_standards()


def limits_by_recipe(plates: Sequence[PlateWork]) -> dict[str, dict[str, dict[str, bool | int | float]]]:
    """Gate limits in force, by recipe."""
    return {work.recipe.recipe_id: work.recipe.limits for work in plates}
