"""Fits of a batch as the rows that are stored: ids, constants with all their error, points, correlations.

The same for series and for grids; what is fitted, and to which wells, is said by the callers.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import pandas as pd

from flows.frames import rows
from flows.stages.constants import stored_constants
from flows.stages.work import PlateWork
from models.identity import result_id
from models.kinetics.fit_results import FitResult
from models.tables import CORRELATIONS, ESTIMATES, FIT_POINTS, FITS

Kind = Literal["series", "grid"]


@dataclass(frozen=True)
class StoredFits:
    """Rows of fits, estimates, fit points (with series_id or grid_id) and correlations."""

    fits: pd.DataFrame
    estimates: pd.DataFrame
    points: pd.DataFrame
    correlations: pd.DataFrame

    def tables(self) -> dict[str, pd.DataFrame]:
        """The rows by table, with the tables' columns."""
        return {
            FITS.name: self.fits[FITS.column_names],
            ESTIMATES.name: self.estimates[ESTIMATES.column_names],
            FIT_POINTS.name: self.points[FIT_POINTS.column_names],
            CORRELATIONS.name: self.correlations[CORRELATIONS.column_names],
        }


def joined(parts: Sequence[StoredFits]) -> StoredFits:
    """Rows of several ways of fitting, one after another."""
    return StoredFits(
        *(
            pd.concat([getattr(part, name) for part in parts], ignore_index=True)
            for name in ("fits", "estimates", "points", "correlations")
        )
    )


def law_chosen(result: FitResult) -> pd.Series:
    """Name of the law chosen, by number of series or grid."""
    chosen = result.fits.loc[result.fits["chosen"].astype(bool)]
    return chosen.set_index("series")["law"].astype(object)


def stored_fits(
    plates: Sequence[PlateWork],
    subjects: pd.DataFrame,
    kind: Kind,
    result: FitResult,
    wells_fitted: str,
    stored_as: str | None = None,
) -> StoredFits:
    """Rows of one way of fitting.

    Parameters
    ----------
    plates
        Plate reads by number.
    subjects
        Series or grids by number (the index): their id (`series_id` or `grid_id`), analysis_id, plate, assay,
        lot, enzyme_nm, enzyme_ng_per_ml.
    kind
        Which of the two.
    result
        Fits, whose `series` are the subjects' numbers and whose points' rows are (analysis_id, well).
    wells_fitted
        What the fits rest on, as `estimates.wells` says.
    stored_as
        Name under which the one law of `result` is stored, where it is not its own.
    """
    own, other = ("series_id", "grid_id") if kind == "series" else ("grid_id", "series_id")
    frames = (result.fits, stored_constants(plates, subjects, result), result.points, _correlations(result))
    fits, constants, points, correlations = (
        _with_ids(frame if stored_as is None else frame.assign(law=stored_as), subjects, own, wells_fitted)
        for frame in frames
    )
    constants = constants.assign(
        assay=constants["series"].map(subjects["assay"]), lot=constants["series"].map(subjects["lot"])
    )
    constants["estimate_id"] = [result_id("estimate", row.fit_id, row.constant) for row in rows(constants)]
    points["well"] = [well for _, well in points["row"]]
    return StoredFits(fits.assign(**{other: None}), constants.assign(**{other: None}), points, correlations)


def _with_ids(frame: pd.DataFrame, subjects: pd.DataFrame, own: str, wells_fitted: str) -> pd.DataFrame:
    """Rows by series (or grid) and law with the ids of their subject, its analysis and the fit."""
    subject_ids = frame["series"].map(subjects[own])
    return frame.assign(
        **{own: subject_ids},
        analysis_id=frame["series"].map(subjects["analysis_id"]),
        wells=wells_fitted,
        fit_id=[
            result_id("fit", subject, name, wells_fitted)
            for subject, name in zip(subject_ids, frame["law"], strict=True)
        ],
    )


def _correlations(result: FitResult) -> pd.DataFrame:
    """Correlation of every two constants of every fit whose covariance is known, by series and law."""
    found: list[dict[str, object]] = []
    names_of = result.constants.groupby(["series", "law"], sort=False)["constant"].agg(list).to_dict()
    for (number, name), covariance in sorted(result.covariance.items()):
        # Constants that are derived from the fitted ones come after them.
        names = names_of[number, name][: len(covariance)]
        with np.errstate(all="ignore"):
            errors = np.sqrt(np.diag(covariance))
            matrix = covariance / np.outer(errors, errors)
        found += [
            {
                "series": number,
                "law": name,
                "constant": names[j],
                "other_constant": names[k],
                "correlation": float(matrix[j, k]),
            }
            for j in range(len(names))
            for k in range(j + 1, len(names))
            if np.isfinite(matrix[j, k])
        ]
    return pd.DataFrame(found, columns=["series", "law", "constant", "other_constant", "correlation"])
