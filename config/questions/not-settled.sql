-- title: Constants that the data do not settle
-- answers: Lots' constants without a value, with an open interval, or with one wider than so many percent of the
--     value; why, and on how many plate reads they rest.
-- parameter: percent (number, default 20): Half width of the 95 % interval, in percent of the value
-- parameter: assay (assay, optional): One assay only
SELECT assay, lot, constant, modulator, value, low, high, unit,
       100 * (high - low) / 2 / abs(value) AS half_width_percent,
       CASE WHEN value IS NULL THEN 'no value'
            WHEN low IS NULL OR high IS NULL THEN 'open interval' ELSE 'wide interval' END AS what,
       reason, plate_read_count, standing
FROM lot_latest
WHERE ($assay IS NULL OR assay = $assay) AND NOT ends_with(constant, '_katal')
  AND (value IS NULL OR low IS NULL OR high IS NULL OR (high - low) / 2 > $percent / 100.0 * abs(value))
ORDER BY assay, lot, constant, modulator
