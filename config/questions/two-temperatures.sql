-- title: Constants of a lot at two temperatures
-- answers: Each lot's constants by the temperature at which they were measured (as the export reports it, else as
--     the assay states it, in steps), over all assays of one enzyme; with the ratio to the next lower temperature,
--     and that ratio for 10 K (Q10).
-- parameter: lot (lot, optional): One lot only
-- parameter: constant (text, optional): One constant only
-- parameter: step_c (number, default 1): Width of a temperature step in degC
WITH one AS (
    SELECT json_extract_string(r.recipe, '$.assay.enzyme') AS enzyme, e.lot, e.constant, e.unit, e.value,
           coalesce(
               (p.temperature_low_c + p.temperature_high_c) / 2,
               TRY_CAST(json_extract_string(r.recipe, '$.assay.conditions.temperature_c') AS DOUBLE)
           ) AS temperature_c
    FROM current_estimates e
    JOIN current_analyses c USING (analysis_id)
    JOIN recipes r USING (recipe_id)
    JOIN plate_reads p ON p.plate_read_id = c.plate_read_id
    WHERE e.wells = 'clear' AND e.series_standing = 'clear' AND e.modulator IS NULL AND e.value > 0
      AND e.constant <> 'vmax'
      AND ($lot IS NULL OR e.lot = $lot) AND ($constant IS NULL OR e.constant = $constant)
), step AS (
    SELECT enzyme, lot, constant, unit, round(temperature_c / $step_c) * $step_c AS temperature_c,
           exp(avg(ln(value))) AS value, count(*) AS series
    FROM one WHERE temperature_c IS NOT NULL GROUP BY ALL
), beside AS (
    SELECT *, value / lag(value) OVER warmer AS ratio_to_cooler,
           temperature_c - lag(temperature_c) OVER warmer AS warmer_by_k
    FROM step
    WINDOW warmer AS (PARTITION BY enzyme, lot, constant, unit ORDER BY temperature_c)
)
SELECT enzyme, lot, constant, temperature_c, value, unit, series, ratio_to_cooler,
       pow(ratio_to_cooler, 10 / warmer_by_k) AS q10
FROM beside
ORDER BY enzyme, lot, constant, unit, temperature_c
