"""Tables of what is fitted: series, grids, fits, estimates, and what tests them."""

from models.tables import keys
from models.tables.table import Column, Table

_LAW_CHOSEN = Column("law", "text", "The rate law chosen; NULL where nothing could be fitted", nullable=True)
_REFUSAL = Column(
    "refusal", "text", "Why the clear wells could not be fitted; NULL where they were", nullable=True
)
_SERIES_OF = keys.SERIES_ID.optional("The series fitted; NULL where it is a grid")
_GRID_OF = keys.GRID_ID.optional("The grid fitted; NULL where it is a series")

SERIES = Table(
    "series",
    "Wells of one plate read that share lot, enzyme level and modulator level and differ in substrate",
    ("series_id",),
    (
        keys.SERIES_ID,
        keys.ANALYSIS_ID,
        keys.LOT,
        Column("role", "text", "sample or reference"),
        keys.ENZYME_NM,
        keys.ENZYME_NG_PER_ML,
        keys.MODULATOR,
        keys.MODULATOR_UM,
        Column("well_count", "integer", "Wells in the series"),
        Column("clear_well_count", "integer", "Wells that were clear and so were fitted"),
        Column("level_count", "integer", "Distinct substrate levels among the clear wells"),
        Column(
            "lowest_substrate_um", "real", "Lowest substrate among the clear wells", "umol/L", nullable=True
        ),
        Column(
            "highest_substrate_um", "real", "Highest substrate among the clear wells", "umol/L", nullable=True
        ),
        _LAW_CHOSEN,
        _REFUSAL,
        keys.STANDING,
    ),
)

GRIDS = Table(
    "grids",
    "Wells of one plate read that share lot, enzyme level and modulator and differ in how much modulator and "
    "substrate they hold, wells without modulator included",
    ("grid_id",),
    (
        keys.GRID_ID,
        keys.ANALYSIS_ID,
        keys.LOT,
        Column("role", "text", "sample or reference"),
        keys.ENZYME_NM,
        keys.ENZYME_NG_PER_ML,
        Column("modulator", "text", "Inhibitor or activator"),
        Column("well_count", "integer", "Wells in the grid"),
        Column("clear_well_count", "integer", "Wells that were clear and so were fitted"),
        Column("substrate_level_count", "integer", "Distinct substrate levels among the clear wells"),
        Column("modulator_level_count", "integer", "Distinct modulator levels among them; none is one"),
        _LAW_CHOSEN,
        _REFUSAL,
        keys.STANDING,
    ),
)

FITS = Table(
    "fits",
    "One law fitted to one series or grid",
    ("fit_id",),
    (
        keys.FIT_ID,
        _SERIES_OF,
        _GRID_OF,
        keys.ANALYSIS_ID,
        keys.LAW,
        keys.WELLS_FITTED,
        Column("chosen", "flag", "Whether this law was chosen for these wells"),
        Column("converged", "flag", "Whether the solver reached the optimum"),
        Column("trusted", "flag", "Whether the uncertainty can be trusted"),
        Column("distrust", "text", "Why the uncertainty cannot be trusted; NULL where it can", nullable=True),
        Column("point_count", "integer", "Rates fitted"),
        Column("degrees_of_freedom", "integer", "Rates less constants"),
        Column("weighted_residual_sum", "real", "Sum of squared residuals, each over its variance", "1"),
        Column(
            "aicc", "real", "Akaike's information criterion, corrected for few points", "1", nullable=True
        ),
        Column("evidence_weight", "real", "Akaike weight among the candidate laws", "1", nullable=True),
        Column(
            "lack_of_fit_p",
            "real",
            "p value of lack of fit against the scatter of replicates; NULL without replicates",
            "1",
            nullable=True,
        ),
        Column(
            "runs_p",
            "real",
            "p value of too few runs of residuals of one sign, in order of substrate; NULL where untold",
            "1",
            nullable=True,
        ),
    ),
)

FIT_POINTS = Table(
    "fit_points",
    "One rate as the law chosen sees it",
    ("fit_id", "well"),
    (
        keys.FIT_ID,
        keys.ANALYSIS_ID,
        keys.WELL,
        Column("substrate_um", "real", "Mean substrate over the rate's window", "umol/L"),
        Column("v_um_per_s", "real", "Rate, blank subtracted", "umol/L/s"),
        Column("fitted_um_per_s", "real", "Rate that the law gives", "umol/L/s"),
        Column(
            "v_sd_um_per_s",
            "real",
            "Standard deviation that the weights give the rate; NULL where a robust loss gave it no weight",
            "umol/L/s",
            nullable=True,
        ),
        Column(
            "leverage",
            "real",
            "Share of the fitted rate that the rate itself makes; NULL where constants are not told apart",
            "1",
            nullable=True,
        ),
        Column(
            "studentised_residual",
            "real",
            "Externally studentised residual; NULL where no point is to spare",
            "1",
            nullable=True,
        ),
    ),
)

CORRELATIONS = Table(
    "correlations",
    "Correlation of two constants of a fit",
    ("fit_id", "constant", "other_constant"),
    (
        keys.FIT_ID,
        keys.ANALYSIS_ID,
        keys.CONSTANT,
        Column("other_constant", "text", "The constant that stands after it in the law's order"),
        Column("correlation", "real", "Correlation of their errors", "1"),
    ),
)

COMPARISONS = Table(
    "comparisons",
    "Constants of a series from whole curves against those from initial rates, with their joint uncertainty",
    ("series_id",),
    (
        keys.SERIES_ID,
        keys.ANALYSIS_ID,
        Column("km_ratio", "real", "Km from whole curves over Km from initial rates", "1"),
        Column("km_ratio_low", "real", "Lower end of its 95 % interval", "1", nullable=True),
        Column("km_ratio_high", "real", "Upper end of its 95 % interval", "1", nullable=True),
        Column("vmax_ratio", "real", "Vmax from whole curves over Vmax from initial rates", "1"),
        Column("vmax_ratio_low", "real", "Lower end of its 95 % interval", "1", nullable=True),
        Column("vmax_ratio_high", "real", "Upper end of its 95 % interval", "1", nullable=True),
        Column("p_value", "real", "Chance of both ratios lying this far from 1 together", "1", nullable=True),
    ),
)

SHIFTS = Table(
    "shifts",
    "Whether constants of a lot differ between modulator levels, by fits that share them or not",
    ("grid_id", "law", "constants"),
    (
        keys.GRID_ID,
        keys.ANALYSIS_ID,
        keys.LAW,
        Column("constants", "text", "Constants that the simpler fit shares, separated by commas"),
        Column("f_value", "real", "F of the rise in the weighted sum of squares", "1"),
        Column("numerator_degrees", "integer", "Constants saved by sharing"),
        Column("denominator_degrees", "integer", "Rates less constants of the separate fits"),
        Column("p_value", "real", "Chance of such an F where nothing differs", "1"),
    ),
)

ESTIMATES = Table(
    "estimates",
    "One fitted constant with its 95 % interval, in one revision",
    ("estimate_id",),
    (
        keys.ESTIMATE_ID,
        keys.FIT_ID,
        _SERIES_OF,
        _GRID_OF,
        keys.ANALYSIS_ID,
        keys.ASSAY,
        keys.LOT,
        keys.LAW,
        keys.WELLS_FITTED,
        Column("chosen", "flag", "Whether the estimate's law was chosen for these wells"),
        keys.CONSTANT,
        keys.VALUE,
        keys.STANDARD_ERROR,
        keys.LOW,
        keys.HIGH,
        keys.UNIT,
        Column(
            "assay_relative_error",
            "real",
            "Relative error of the assay's own calibration, in error and interval; shared by all its plates",
            "1",
        ),
    ),
)
