"""Columns that several tables share: ids, names and the words they may hold. Declared once, here."""

from models.tables.table import Column

EXPORT_ID = Column("export_id", "text", "SHA-256 of the export's bytes")
MAP_ID = Column("map_id", "text", "SHA-256 of the plate map file's bytes")
RECIPE_ID = Column("recipe_id", "text", "SHA-256 of the canonical recipe: assay, profile, gate limits, code")
PASS_ID = Column("pass_id", "text", "The pass of the overnight flow that wrote this row")
PLATE_READ_ID = Column("plate_read_id", "text", "Digest of the export's id and the plate read's place in it")
PLATE_ID = Column("plate_id", "text", "The plate's barcode or name")
ANALYSIS_ID = Column(
    "analysis_id", "text", "Digest of plate read, plate map, recipe and the decisions in force: one revision"
)
SERIES_ID = Column("series_id", "text", "Digest of the analysis and of what the series' wells share")
GRID_ID = Column("grid_id", "text", "Digest of the analysis and of what the grid's wells share")
FIT_ID = Column("fit_id", "text", "Digest of the series or grid, the law and the wells fitted")
ESTIMATE_ID = Column("estimate_id", "text", "Digest of the fit and the constant's name")
LOT_VALUE_ID = Column(
    "lot_value_id",
    "text",
    "Digest of lot, assay, constant, the estimates it rests on and how many series are held",
)

ASSAY = Column("assay", "text", "Name of the assay, as its file in the site's configuration is called")
LOT = Column("lot", "text", "The enzyme lot")
WELL = Column("well", "text", "Well name: row letters and column number without padding, such as B7")
ONLY_CHANNEL = "signal"
"""What the channel of an export is called that names none."""
CHANNEL = Column(
    "channel", "text", "Channel of the read, such as a wavelength; 'signal' where there is one only"
)
LAW = Column("law", "text", "Name of the rate law")
CONSTANT = Column("constant", "text", "Name of the constant: km, vmax, kcat, kcat_per_km, k_half, hill_n ...")
WELLS_FITTED = Column(
    "wells",
    "text",
    "What the fit rests on: rates of wells that are 'clear', of 'all' that are not void, or whole 'curves'",
)
STANDING = Column("standing", "text", "clear, held (waits for a person) or void (cannot be used)")

SUBSTRATE_UM = Column("substrate_um", "real", "Nominal substrate concentration at the start", "umol/L")
ENZYME_NM = Column("enzyme_nm", "real", "Enzyme concentration by amount", "nmol/L", nullable=True)
ENZYME_NG_PER_ML = Column("enzyme_ng_per_ml", "real", "Enzyme concentration by mass", "ng/mL", nullable=True)
MODULATOR = Column("modulator", "text", "Inhibitor or activator in the well", nullable=True)
MODULATOR_UM = Column("modulator_um", "real", "Modulator concentration", "umol/L", nullable=True)

# A constant's value carries its unit in the row, because one column holds constants of several dimensions.
VALUE = Column("value", "real", "The constant, in the unit of its row")
STANDARD_ERROR = Column("standard_error", "real", "Standard error, in the unit of its row", nullable=True)
LOW = Column(
    "low", "real", "Lower end of the 95 % interval; NULL where the data leave it open", nullable=True
)
HIGH = Column(
    "high", "real", "Upper end of the 95 % interval; NULL where the data leave it open", nullable=True
)
UNIT = Column("unit", "text", "Unit of the row's value; '1' for a pure number")
