"""A simulated site of any size, written straight into the tables: what five years of nights leave behind.

Every number follows from its row's place by a hash, so that the same size gives the same site. Values stand
where fits would stand: here the warehouse is tested, not the numbers. Invented lots L-00001 ... and R-1.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path

import duckdb

from flows.site.layout import Site, create_site
from flows.warehouse import writer
from flows.warehouse.schema import prepare

PLATES_A_NIGHT = 11
LOTS_A_PLATE = 10
PLATES_A_BLOCK = 100
"""Plates in a row on which the same lots stand."""
ASSAYS = ("oxidase_405", "oxidase_340", "esterase_405")
REFERENCE = "R-1"
LEVELS = 8
READS = 57
STEP_AT, STEP = 0.6, 1.15
"""Share of the plates after which the reference's Km in the first assay is another, and by which factor."""

_ASSAY = """enzyme = "invented enzyme {number}"
substrate = "invented substrate"
product = "invented product"
[signal]
kind = "absorbance"
[response]
signal_per_um = 0.01
source = "invented"
[conditions]
temperature_c = 25.0
ph = 7.5
"""
_SPECIFICATION = """assay = "{assay}"
source = "release specification {assay}, version 1 (invented)"
lots = ["L-*"]
reference_lot = "R-1"
[rule]
guard_band_factor = 1.0
[[constants]]
constant = "km"
lower = 60
upper = 100
unit = "umol/L"
[constants.equivalence]
lowest_ratio = 0.8
highest_ratio = 1.25
[[constants]]
constant = "kcat"
lower = 90
unit = "1/s"
[charts]
base_first_day = 2021-01-04
base_last_day = {last_day}
"""


@dataclass(frozen=True)
class Size:
    """How large a site is.

    Attributes
    ----------
    plates
        Plate reads; 20,000 are five years.
    replicates
        Wells a substrate level; 4 make 352 wells a plate.
    readings
        Plate reads whose readings are written, the latest of all.
    """

    plates: int
    replicates: int = 4
    readings: int = 0


def write_site(root: Path, size: Size) -> Site:
    """Make the site, load its tables and publish them."""
    source = root / "configuration"
    for folder in ("assays", "specifications"):
        (source / folder).mkdir(parents=True)
    (source / "site.toml").write_text('name = "Five years"\n')
    for number, assay in enumerate(ASSAYS):
        (source / "assays" / f"{assay}.toml").write_text(_ASSAY.format(number=number))
        text = _SPECIFICATION.format(
            assay=assay, last_day="2021-01-31" if size.plates > 300 else "2021-01-08"
        )
        (source / "specifications" / f"{assay}.toml").write_text(text)
    site = create_site(root / "site", source)
    with duckdb.connect(str(site.loader_file)) as connection:
        connection.execute("SET TimeZone = 'UTC'; SET preserve_insertion_order = false")
        prepare(connection, site)
        for line in _statements(size):
            connection.execute(line)
        if size.readings:
            _write_readings(connection, site, size)
        prepare(connection, site)
        connection.execute("CHECKPOINT")
    writer.publish(site)
    return site


def _statements(size: Size) -> list[str]:
    plates, night = size.plates, PLATES_A_NIGHT
    recipe = json.dumps({"assay": {"signal": {"channel": None}, "conditions": {"temperature_c": 25.0}}})
    assays = ", ".join(f"'{name}'" for name in ASSAYS)
    return [
        "CREATE TEMP MACRO u(a, b) AS (hash(a, b) % 1000000007 + 0.5) / 1000000007.0",
        "CREATE TEMP MACRO n(a, b) AS sqrt(-2 * ln(u(a, b || 'r'))) * cos(2 * pi() * u(a, b || 'p'))",
        f"""CREATE TEMP TABLE plate AS
        SELECT p, p // {night} AS night, p % 3 AS a, [{assays}][p % 3 + 1] AS assay,
               TIMESTAMPTZ '2021-01-04 20:00:00+00' + to_days(CAST(p // {night} AS INTEGER))
                   + to_minutes(CAST(40 * (p % {night}) AS INTEGER)) AS begun,
               md5('read' || p) AS plate_read_id, md5('analysis' || p) AS analysis_id,
               md5('pass' || p // {night}) AS pass_id, md5('recipe' || p % 3) AS recipe_id,
               repeat(md5('export' || p), 2) AS export_id, md5('map' || p // {night}) AS map_id
        FROM range({plates}) t(p)""",
        f"""CREATE TEMP TABLE member AS
        SELECT plate.*, s, md5('series' || p || '-' || s) AS series_id,
               CASE WHEN s = 0 THEN '{REFERENCE}'
                    ELSE 'L-' || lpad(CAST(p // {PLATES_A_BLOCK} * {LOTS_A_PLATE} + s AS VARCHAR), 5, '0')
               END AS lot,
               CASE WHEN s = 0 THEN 'reference' ELSE 'sample' END AS role,
               CASE WHEN u(series_id, 'held') < 0.03 THEN 'held' ELSE 'clear' END AS standing
        FROM plate, range({LOTS_A_PLATE + 1}) t(s)""",
        f"""CREATE TEMP TABLE truth AS
        SELECT *, 80 * exp(CASE WHEN s = 0 THEN 0 ELSE 0.05 * n(lot, 'km') END + 0.02 * n(p, 'km')
                           + 0.02 * n(series_id, 'km'))
               * CASE WHEN s = 0 AND a = 0 AND p >= {STEP_AT} * {plates} THEN {STEP} ELSE 1 END AS km,
               100 * exp(CASE WHEN s = 0 THEN 0 ELSE 0.03 * n(lot, 'kcat') END + 0.015 * n(p, 'kcat')
                         + 0.01 * n(series_id, 'kcat'))
               * CASE WHEN s > 0 AND hash(lot) % 17 = 0 THEN 0.85 ELSE 1 END AS kcat
        FROM member""",
        """INSERT INTO passes BY NAME
        SELECT pass_id, min(begun) + to_hours(9) AS started_at,
               min(begun) + to_hours(9) + to_minutes(4) AS finished_at,
               '0.1.0+made' AS code_version, count(*) AS export_count, 1 AS map_count,
               0 AS quarantined_count, count(*) AS analysis_count FROM plate GROUP BY pass_id""",
        f"""INSERT INTO recipes BY NAME
        SELECT DISTINCT recipe_id, assay, 'wide' AS profile, '0.1.0+made' AS code_version,
               '{recipe}' AS recipe
        FROM plate""",
        """INSERT INTO files BY NAME
        SELECT export_id AS file_id, 'export' AS kind, 'plate_' || p || '.csv' AS file_name,
               200000 AS byte_count, begun + to_hours(8) AS received_at, 'wide' AS profile, pass_id FROM plate
        UNION ALL BY NAME
        SELECT DISTINCT map_id AS file_id, 'plate_map' AS kind, 'map_' || night || '.csv' AS file_name,
               40000 AS byte_count, min(begun) OVER (PARTITION BY night) AS received_at, NULL AS profile,
                      pass_id
        FROM plate""",
        """INSERT INTO plate_reads BY NAME
        SELECT plate_read_id, export_id, 1 AS place_in_export, 'P' || lpad(CAST(p AS VARCHAR), 6,
               '0') AS plate_id,
               384 AS plate_format, begun AS started_at, 384 AS well_count, 57 AS read_count,
               'signal' AS channels, 560.0 AS duration_s, 24.9 AS temperature_low_c,
               25.1 AS temperature_high_c FROM plate""",
        """INSERT INTO analyses BY NAME
        SELECT analysis_id, plate_read_id, map_id, assay, recipe_id, pass_id, 1 AS revision,
               begun + to_hours(9) AS computed_at,
               CASE WHEN u(p, 'held') < 0.2 THEN 'held' ELSE 'clear' END AS standing FROM plate""",
        f"""INSERT INTO series BY NAME
        SELECT series_id, analysis_id, lot, role, 5.0 AS enzyme_nm, {LEVELS * size.replicates} AS well_count,
               {LEVELS * size.replicates} AS clear_well_count, {LEVELS} AS level_count,
               10.0 AS lowest_substrate_um, 1280.0 AS highest_substrate_um, 'michaelis_menten' AS law,
                      standing
        FROM member""",
        *_well_statements(size),
        *_fit_statements(),
        *_lot_statements(size),
    ]


def _well_statements(size: Size) -> list[str]:
    wells = LEVELS * size.replicates
    return [
        f"""CREATE TEMP TABLE well_of AS
        SELECT t.*, w, 2 * s + 1 + w // 22 AS row_number, w % 22 + 1 AS column_number,
               chr(CAST(65 + (s * {wells} + w) // 24 AS INTEGER)) || ((s * {wells} + w) % 24 + 1) AS well,
               10.0 * pow(2, w // {size.replicates}) AS level_um,
               CASE WHEN u(series_id, w) < 0.002 THEN 'void' WHEN u(series_id, w) < 0.025 THEN 'held'
                    ELSE 'clear' END AS well_standing
        FROM truth t, range({wells}) x(w)""",
        """INSERT INTO wells BY NAME
        SELECT analysis_id, well, row_number, column_number, role, lot, level_um AS substrate_um,
               5.0 AS enzyme_nm, series_id, well_standing AS standing FROM well_of""",
        """INSERT INTO rates BY NAME
        SELECT analysis_id, well, 0.005 * kcat * level_um / (km + level_um) * (1 + 0.02 * n(series_id, w))
                   AS v0_um_per_s,
               0.003 AS v0_se_um_per_s, 0.0 AS blank_rate_um_per_s, 0.001 AS blank_rate_se_um_per_s,
               'plate' AS blank_source, 0.97 * level_um AS mean_substrate_um, 1 AS window_first_read,
               30 AS window_last_read, 0.0 AS window_start_s, 290.0 AS window_end_s, 30 AS window_point_count,
               0.06 AS conversion, 0.02 AS shortest_conversion, 0.01 AS slope_change, 0.4 AS slope_change_t,
               0.0 AS lag_s, 'straight' AS shape, 'line' AS rate_basis, 0 AS overflow_count,
                      0 AS missing_count
        FROM well_of""",
        """INSERT INTO findings BY NAME
        SELECT md5(series_id || 'w' || w) AS finding_id, analysis_id,
               ['substrate_depletion', 'initial_slope_nonlinear', 'outlier_in_series'][CAST(hash(series_id,
                      w) % 3 + 1 AS INTEGER)]
                   AS gate,
               'well' AS subject, well, series_id, lot, 'breach' AS outcome,
               CASE WHEN well_standing = 'void' THEN 'void' ELSE 'hold' END AS severity, 0.21 AS measured,
               0.1 AS limit_value, '1' AS unit, 'An invented finding on well ' || well || '.' AS sentence
        FROM well_of WHERE well_standing <> 'clear'""",
        "DROP TABLE well_of",
    ]


def _fit_statements() -> list[str]:
    return [
        """CREATE TEMP TABLE fitted AS
        SELECT t.*, f.law, f.wells, f.chosen, md5('fit' || series_id || f.law || f.wells) AS fit_id
        FROM truth t, (VALUES ('michaelis_menten', 'clear', true), ('michaelis_menten', 'all', true),
                              ('hill', 'clear', false)) f(law, wells, chosen)""",
        """INSERT INTO fits BY NAME
        SELECT fit_id, series_id, analysis_id, law, wells, chosen, true AS converged, true AS trusted,
               32 AS point_count, 30 AS degrees_of_freedom, 31.0 AS weighted_residual_sum, -200.0 AS aicc
        FROM fitted""",
        """INSERT INTO estimates BY NAME
        SELECT md5(fit_id || c.constant) AS estimate_id, fit_id, series_id, analysis_id, assay, lot, law,
               wells,
               chosen, c.constant,
               CASE c.constant WHEN 'kcat' THEN kcat WHEN 'vmax' THEN 0.005 * kcat WHEN 'hill_n' THEN 1.0
                    WHEN 'kcat_per_km' THEN 1e6 * kcat / km ELSE km END AS value,
               0.02 * value AS standard_error, value * 0.96 AS low, value * 1.04 AS high, c.unit,
               0.0 AS assay_relative_error
        FROM fitted JOIN (VALUES ('michaelis_menten', 'km', 'umol/L'), ('michaelis_menten', 'vmax',
               'umol/L/s'),
               ('michaelis_menten', 'kcat', '1/s'), ('michaelis_menten', 'kcat_per_km', 'L/mol/s'),
               ('hill', 'k_half', 'umol/L'), ('hill', 'vmax', 'umol/L/s'), ('hill', 'kcat', '1/s'),
               ('hill', 'hill_n', '1')) c(law, constant, unit) USING (law)""",
        "DROP TABLE fitted",
    ]


def _lot_statements(size: Size) -> list[str]:
    """A value after each night that saw the lot; of the reference,
    after the last of every 30 nights alone."""
    every = 30 if size.plates > 3000 else 1
    return [
        f"""CREATE TEMP TABLE version AS
        SELECT DISTINCT lot, assay, role, night, pass_id FROM member
        WHERE role = 'sample' OR night % {every} = 0
           OR night = (SELECT max(m.night) FROM member m WHERE m.a = member.a)""",
        """CREATE TEMP TABLE source AS
        SELECT v.lot, v.assay, v.role, v.night, v.pass_id, e.constant, e.estimate_id, e.value, e.unit,
               m.begun,
               m.plate_read_id, md5('value' || v.lot || v.assay || e.constant || v.night) AS lot_value_id
        FROM version v
        JOIN member m ON m.lot = v.lot AND m.assay = v.assay AND m.night <= v.night AND m.standing = 'clear'
        JOIN estimates e ON e.series_id = m.series_id AND e.wells = 'clear' AND e.law = 'michaelis_menten'
        WHERE e.constant <> 'vmax'""",
        "INSERT INTO lot_value_sources BY NAME SELECT lot_value_id, estimate_id FROM source",
        """INSERT INTO lot_values BY NAME
        SELECT lot_value_id, any_value(pass_id) AS pass_id, any_value(assay) AS assay, any_value(lot) AS lot,
               any_value(role) AS role, any_value(constant) AS constant, exp(avg(ln(value))) AS value,
               exp(avg(ln(value))) * coalesce(stddev_samp(ln(value)),
                      0.03) / sqrt(count(*)) AS standard_error,
               0.98 * exp(avg(ln(value))) AS low, 1.02 * exp(avg(ln(value))) AS high, any_value(unit) AS unit,
               CASE WHEN count(*) > 1 THEN exp(avg(ln(value))) * 0.02 END AS between_plate_sd,
               count(DISTINCT plate_read_id) AS plate_read_count, count(*) AS series_count,
               0 AS held_series_count, max(begun) AS measured_at, 'clear' AS standing
        FROM source GROUP BY lot_value_id""",
        "DROP TABLE source",
    ]


def _write_readings(connection: duckdb.DuckDBPyConnection, site: Site, size: Size) -> None:
    folder = site.lake / "readings"
    folder.mkdir(exist_ok=True)
    first = size.plates - size.readings
    for p in range(first, size.plates):
        connection.execute(_copy(folder, p, connection))


def _copy(folder: Path, p: int, connection: duckdb.DuckDBPyConnection) -> str:
    row = connection.execute(f"SELECT md5('read' || {p})").fetchall()
    return f"""COPY (
        SELECT plate_read_id, 'signal' AS channel, well, r + 1 AS read_number, 10.0 * r AS time_s,
               round(0.1 + 0.1 * v0_um_per_s * r + 0.001 * n(well, r), 4) AS signal, 'ok' AS state,
               25.0 AS temperature_c, NULL::VARCHAR AS source_sheet, r + 2 AS source_row,
               row_number() OVER (PARTITION BY r ORDER BY well) + 1 AS source_column
        FROM plate JOIN rates USING (analysis_id), range({READS}) t(r) WHERE p = {p}
        ORDER BY well, r
        ) TO '{folder}/{row[0][0]}.parquet' (FORMAT parquet, COMPRESSION zstd)"""
