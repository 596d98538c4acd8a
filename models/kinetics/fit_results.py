"""What comes of fitting a batch of series: frames of fits, constants, refusals and points.

Holds results and joins them; fits nothing.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import pandas as pd

from models.kinetics.laws.law import Floats

FIT_COLUMNS = (
    "series",
    "law",
    "chosen",
    "converged",
    "trusted",
    "distrust",
    "point_count",
    "degrees_of_freedom",
    "weighted_residual_sum",
    "aicc",
    "evidence_weight",
    "lack_of_fit_p",
    "runs_p",
)
POINT_COLUMNS = (
    "place",
    "series",
    "law",
    "row",
    "substrate_um",
    "v_um_per_s",
    "fitted_um_per_s",
    "v_sd_um_per_s",
    "leverage",
    "studentised_residual",
)
CONSTANT_COLUMNS = (
    "series",
    "law",
    "chosen",
    "constant",
    "value",
    "standard_error",
    "low",
    "high",
    "unit",
)
REFUSAL_COLUMNS = ("series", "kind", "reason")


@dataclass(frozen=True)
class FitResult:
    """Fits of a batch of series.

    Attributes
    ----------
    fits
        A row a series and law that could be fitted: series, law, chosen, converged, trusted, distrust,
        point_count, degrees_of_freedom, weighted_residual_sum, aicc, evidence_weight, lack_of_fit_p, runs_p.
    constants
        A row a constant: series, law, chosen, constant, value, standard_error, low, high, unit. low and high
        are NaN where the 95 % interval is open.
    refusals
        A row a series that no law could be fitted to: series, kind, reason.
    points
        A row a rate of the law chosen for its series: place and row (position and index label in the frame
        that was fitted), series, law, substrate_um, v_um_per_s, fitted_um_per_s, v_sd_um_per_s, leverage,
        studentised_residual.
    covariance
        Covariance of the constants, in the law's order, by series and law; NaN where it is not known.
    plate_cv
        Replicate coefficient of variation that the weights used, by plate: of what acts on every rate alike.
    substrate_cv
        The same of the substrate in the wells, by plate.
    """

    fits: pd.DataFrame
    constants: pd.DataFrame
    refusals: pd.DataFrame
    points: pd.DataFrame
    covariance: Mapping[tuple[int, str], Floats] = field(repr=False)
    plate_cv: Mapping[int, float]
    substrate_cv: Mapping[int, float] = field(default_factory=dict)


def joined(parts: Sequence[FitResult]) -> FitResult:
    """Results of several blocks as one, series by number and points in the order of the frame."""
    frames = {
        name: pd.concat(
            [each for part in parts if len(each := getattr(part, name))] or [getattr(parts[0], name)]
        )
        for name in ("fits", "constants", "refusals", "points")
    }
    ordered = {
        name: frame.sort_values("place" if name == "points" else "series", kind="stable", ignore_index=True)
        for name, frame in frames.items()
    }
    return FitResult(
        **ordered,
        covariance={key: value for part in parts for key, value in part.covariance.items()},
        plate_cv={key: value for part in parts for key, value in part.plate_cv.items()},
        substrate_cv={key: value for part in parts for key, value in part.substrate_cv.items()},
    )
