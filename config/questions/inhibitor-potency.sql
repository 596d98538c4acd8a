-- title: Inhibitor potency over lots
-- answers: Ki, Kic, Kiu, IC50 of each modulator on each lot as they stand, with the ratio to the geometric mean
--     of all lots: a lot that answers to an inhibitor as no other does is another enzyme, or another inhibitor.
-- parameter: modulator (text, optional): One modulator only
-- parameter: assay (assay, optional): One assay only
WITH potency AS (
    SELECT * FROM lot_latest
    WHERE modulator IS NOT NULL AND ($modulator IS NULL OR modulator = $modulator)
      AND ($assay IS NULL OR assay = $assay)
)
SELECT modulator, assay, constant, lot, value, low, high, unit,
       CASE WHEN value > 0 AND count(value) OVER same > 1
            THEN value / exp(avg(ln(CASE WHEN value > 0 THEN value END)) OVER same) END AS ratio_to_all_lots,
       count(value) OVER same AS lots, plate_read_count, measured_at, standing
FROM potency
WINDOW same AS (PARTITION BY modulator, assay, constant, unit)
ORDER BY modulator, assay, constant, value, lot
