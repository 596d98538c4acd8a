-- title: A lot's constants, plate read after plate read
-- answers: What each plate read made of the lot, and its ratio to the reference lot on the same plate read: a
--     trend that the reference shares is the assay's, not the lot's. Wells that wait for a person are left out of
--     each value; a plate read whose series is held as a whole says so.
-- parameter: lot (lot, required): The lot
-- parameter: constant (text, optional): One constant only, such as km or kcat; else all
-- parameter: assay (assay, optional): One assay only, where the lot stands in several
-- parameter: since (date, optional): First day, such as 2026-01-15
-- parameter: until (date, optional): Last day
WITH one AS (
    SELECT assay, lot, role, constant, unit, measured_at, plate_id, plate_read_id, series_standing,
           value, low, high
    FROM current_estimates
    WHERE wells = 'clear' AND modulator IS NULL AND constant <> 'vmax' AND value > 0
      AND ($constant IS NULL OR constant = $constant)
), reference AS (
    SELECT plate_read_id, constant, unit, exp(avg(ln(value))) AS value
    FROM one WHERE role = 'reference' AND series_standing = 'clear' GROUP BY ALL
)
SELECT o.measured_at::DATE AS day, o.plate_id, o.constant, o.value, o.low, o.high, o.unit,
       o.value / r.value AS ratio_to_reference, o.series_standing AS standing
FROM one o
LEFT JOIN reference r USING (plate_read_id, constant, unit)
WHERE o.lot = $lot AND ($assay IS NULL OR o.assay = $assay)
  AND ($since IS NULL OR o.measured_at::DATE >= CAST($since AS DATE))
  AND ($until IS NULL OR o.measured_at::DATE <= CAST($until AS DATE))
ORDER BY o.assay, o.constant, o.measured_at, o.plate_id, o.value
