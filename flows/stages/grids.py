"""Grids of a batch: a lot's wells at all levels of one modulator, fitted together with shared constants.

Which wells make a grid, which laws are tried, and whether constants shift from level to level; the fits
themselves are in models.kinetics.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from checks.verdicts import series_standings
from flows.frames import rows
from flows.stages.stored_fits import StoredFits, law_chosen, stored_fits
from flows.stages.work import GatedBatch, PlateWork
from models.identity import known, result_id
from models.kinetics.fit_results import FitResult
from models.kinetics.fitting import FitSettings
from models.kinetics.grids import DerivedConstant, fit_grids, ki_from_ic50
from models.kinetics.laws import law
from models.kinetics.shift import modulator_shift
from models.records.assay import Assay
from models.tables import GRIDS, SHIFTS

GRID_SHARES = ("plate", "role", "lot", "enzyme_nm", "enzyme_ng_per_ml")
NO_LAWS = "the assay names no modulator_laws"
UM_PER_NM = 1e-3
# Constants of a dose response from which Ki follows by Cheng and Prusoff.
TO_KI = ("ic50", "ki_app")


@dataclass(frozen=True)
class Grids:
    """Grids of a batch with their standing, the rows of their fits, and the tests of shifts."""

    rows: pd.DataFrame
    stored: Sequence[StoredFits]
    shifts: pd.DataFrame


def fit_grids_of(
    gated: GatedBatch,
    estimates: pd.DataFrame,
    findings: pd.DataFrame,
    standings_fitted: Mapping[str, Sequence[str]],
) -> Grids:
    """Find the grids of a batch, fit them in each way, and test what shifts with the modulator.

    Parameters
    ----------
    gated
        The batch with the standings of its wells.
    estimates
        Estimates of its series with the clear wells: Km for a Ki from an IC50.
    findings
        All findings, those on lots and plate reads included.
    standings_fitted
        Standings of the wells of each way of fitting, by its name, the clear wells first.
    """
    grids, members = find_grids(gated.wells, gated.rated.plates)
    if grids.empty:
        return Grids(GRIDS.empty().assign(series_id=None), (), SHIFTS.empty())
    assays = [gated.rated.plates[plate].recipe.assay for plate in grids["plate"]]
    frame = _rates(gated, grids, members)
    laws = [assay.modulator_laws or () for assay in assays]
    stored, clear = [], None
    for name, standings in standings_fitted.items():
        used = frame[frame["standing"].isin(standings)]
        result = _fit(used, laws, assays)
        clear = clear or result
        derived = _inhibition_constants(result, used, grids, estimates, assays)
        result = FitResult(**{**vars(result), "constants": pd.concat([result.constants, derived])})
        stored.append(stored_fits(gated.rated.plates, grids, "grid", result, name))
    assert clear is not None
    of_clear_wells = frame[frame["standing"] == "clear"]
    described = _described(grids, members, gated.wells, clear, findings)
    return Grids(described, stored, _shifts(of_clear_wells, grids, assays))


def find_grids(wells: pd.DataFrame, plates: Sequence[PlateWork]) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Find the grids of a batch.

    A grid holds the wells of one plate read with one modulator at any level, and those without modulator, of
    one role, lot and enzyme level; where an assay names dose responses only, of one substrate level too.

    Parameters
    ----------
    wells
        Wells of the batch: `series` (-1 for wells of none) and the columns that a grid shares.
    plates
        Plate reads by number.

    Returns
    -------
    tuple of DataFrame
        Grids by number, with grid_id; and members: grid, well_row (the index in `wells`).
    """
    member = wells[wells["series"] >= 0]
    level = member["modulator_um"].fillna(0.0)
    modulated = member[member["modulator"].notna() & (level > 0)]
    single_level = np.array([_dose_only(work.recipe.assay) for work in plates], dtype=bool)
    heads: list[dict[str, object]] = []
    parts: list[pd.DataFrame] = []
    keys = [*GRID_SHARES, "modulator"]
    with_level = modulated.assign(
        level=modulated["substrate_um"].where(single_level[modulated["plate"].to_numpy(dtype=int)])
    )
    unmodulated = member[level == 0]
    for _, group in with_level.groupby([*keys, "level"], dropna=False, sort=True):
        head = group.iloc[0]
        base = unmodulated
        for name in GRID_SHARES:
            same = base[name].isna() if pd.isna(head[name]) else base[name] == head[name]
            base = base[same]
        if not pd.isna(head["level"]):
            base = base[base["substrate_um"] == head["level"]]
        number = len(heads)
        parts.append(pd.DataFrame({"grid": number, "well_row": [*base.index, *group.index]}))
        one_level = known(head["level"])
        heads.append(
            {
                "grid_id": result_id(
                    "grid",
                    head["analysis_id"],
                    head["role"],
                    head["lot"],
                    known(head["enzyme_nm"]),
                    known(head["enzyme_ng_per_ml"]),
                    head["modulator"],
                    one_level,
                ),
                "analysis_id": head["analysis_id"],
                "assay": plates[int(head["plate"])].recipe.assay_name,
                **{name: head[name] for name in keys},
            }
        )
    grids = pd.DataFrame(heads, columns=["grid_id", "analysis_id", "assay", *keys])
    members = pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=["grid", "well_row"])
    return grids, members


def _dose_only(assay: Assay) -> bool:
    """Whether all laws of the assay's modulators are over one level of substrate."""
    return bool(assay.modulator_laws) and all(law(name).fewest_levels == 1 for name in assay.modulator_laws)


def _rates(gated: GatedBatch, grids: pd.DataFrame, members: pd.DataFrame) -> pd.DataFrame:
    """Known rates of the grids' wells, by (analysis_id, well), as `fit_grids` takes them, with `standing`."""
    wells = gated.wells.loc[members["well_row"].to_numpy()].assign(grid=members["grid"].to_numpy())
    joined = wells.merge(gated.rated.rates, on=["analysis_id", "well"], how="inner", validate="m:1")
    modulator_um = joined["modulator_um"].where(joined["modulator"].notna(), 0.0)
    frame = pd.DataFrame(
        {
            "series": joined["grid"],
            "plate": joined["plate"],
            "substrate_um": joined["mean_substrate_um"],
            "nominal_substrate_um": joined["substrate_um"],
            "v_um_per_s": joined["v0_um_per_s"],
            "v_se_um_per_s": joined["v0_se_um_per_s"],
            "modulator_um": modulator_um.astype(float),
            "enzyme_um": joined["enzyme_nm"].astype(float) * UM_PER_NM,
            "standing": joined["standing"],
        }
    )
    frame.index = pd.MultiIndex.from_frame(joined[["analysis_id", "well"]])
    return frame[frame["v_um_per_s"].notna()]


def _fit(frame: pd.DataFrame, laws: Sequence[tuple[str, ...]], assays: Sequence[Assay]) -> FitResult:
    """Fits of the grids whose assay names laws; the others are refused."""
    named = frame[[bool(laws[number]) for number in frame["series"]]]
    settings = FitSettings([assay.loss for assay in assays])
    # A grid without laws has no rows here, and is refused for that: any law's name does.
    result = fit_grids(named, [names or ("michaelis_menten",) for names in laws], settings)
    none = [number for number, names in enumerate(laws) if not names]
    refusals = result.refusals.copy()
    refusals.loc[refusals["series"].isin(none), "reason"] = NO_LAWS
    return FitResult(**{**vars(result), "refusals": refusals})


def _described(
    grids: pd.DataFrame,
    members: pd.DataFrame,
    wells: pd.DataFrame,
    clear_fits: FitResult,
    findings: pd.DataFrame,
) -> pd.DataFrame:
    """Grids with counts of their wells, the law chosen, or why there is none, and their standing."""
    columns = ["standing", "substrate_um", "modulator_um"]
    own = wells.loc[members["well_row"].to_numpy(), columns].assign(grid=members["grid"].to_numpy())
    own["modulator_um"] = own["modulator_um"].fillna(0.0)
    clear = own[own["standing"] == "clear"].groupby("grid")
    described = grids.copy()
    described["well_count"] = own.groupby("grid").size()
    described["clear_well_count"] = clear.size().reindex(grids.index, fill_value=0)
    described["substrate_level_count"] = clear["substrate_um"].nunique().reindex(grids.index, fill_value=0)
    described["modulator_level_count"] = clear["modulator_um"].nunique().reindex(grids.index, fill_value=0)
    described["law"] = law_chosen(clear_fits).reindex(grids.index)
    refusals = clear_fits.refusals.set_index("series")["reason"]
    described["refusal"] = refusals.reindex(grids.index).astype(object)
    # No finding is about a grid: what holds its lot, its plate read or most of its wells holds it.
    described["series_id"] = described["grid_id"]
    membership = own.assign(series_id=described["grid_id"].to_numpy()[own["grid"]])
    described["standing"] = series_standings(described, findings, membership).to_numpy()
    return described


def _inhibition_constants(
    result: FitResult,
    frame: pd.DataFrame,
    grids: pd.DataFrame,
    estimates: pd.DataFrame,
    assays: Sequence[Assay],
) -> pd.DataFrame:
    """Ki of every dose response whose assay says how the inhibitor binds and whose Km is known."""
    found = []
    for row in rows(result.constants[result.constants["constant"].isin(TO_KI)]):
        stated = assays[row.series].inhibition
        if stated is None:
            continue
        substrate_um = float(frame.loc[frame["series"] == row.series, "nominal_substrate_um"].iloc[0])
        km = (
            (stated.km_um, stated.km_standard_error_um or 0.0)
            if stated.km_um is not None
            else _km_of_lot(grids.loc[row.series], estimates)
        )
        if km is None:
            continue
        of = DerivedConstant(row.value, row.standard_error, row.low, row.high)
        ki = ki_from_ic50(of, stated.mode, substrate_um, *km)
        found.append({**row._asdict(), "constant": "ki", **vars(ki)})
    return pd.DataFrame(found, columns=result.constants.columns).astype(result.constants.dtypes)


def _km_of_lot(grid: pd.Series, estimates: pd.DataFrame) -> tuple[float, float] | None:
    """Km of the same lot on the same plate, from the clear wells of a series, with its standard error."""
    mine = estimates[
        (estimates["analysis_id"] == grid["analysis_id"])
        & (estimates["lot"] == grid["lot"])
        & (estimates["constant"] == "km")
        & estimates["chosen"]
    ]
    if mine.empty:
        return None
    best = mine.sort_values(["standard_error", "estimate_id"]).iloc[0]
    return float(best["value"]), float(np.nan_to_num(best["standard_error"]))


def _shifts(frame: pd.DataFrame, grids: pd.DataFrame, assays: Sequence[Assay]) -> pd.DataFrame:
    """Tests of every grid with several series: whether constants differ between levels of the modulator."""
    found: list[dict[str, object]] = []
    for number, of_grid in frame.groupby("series", sort=True):
        grid = grids.loc[number]
        each = max(assays[int(str(number))].laws, key=lambda name: law(name).rank)
        levels = of_grid.groupby("modulator_um")["nominal_substrate_um"].nunique()
        if (levels >= law(each).fewest_levels).sum() < 2:
            continue
        shift = modulator_shift(of_grid, each)
        found += [
            {
                "grid_id": grid["grid_id"],
                "analysis_id": grid["analysis_id"],
                "law": each,
                "constants": ", ".join(test.shared),
                "f_value": test.f_value,
                "numerator_degrees": test.numerator_degrees,
                "denominator_degrees": test.denominator_degrees,
                "p_value": test.p_value,
            }
            for test in shift.tests
        ]
    return pd.DataFrame(found, columns=SHIFTS.column_names)
