-- title: Drift of the reference lots' constants
-- answers: The straight line through a constant of each reference lot over the last days: its change over the
--     days covered, in percent of the mean, with the t value of its slope (beyond about 2 it is more than
--     scatter). A change a year is told where at least a month is covered.
-- parameter: constant (text, default km): The constant, such as km, k_half or kcat
-- parameter: days (integer, default 365): Days back from the latest plate read of each lot
-- parameter: assay (assay, optional): One assay only
WITH chart AS (
    SELECT assay, lot, constant, unit, value, measured_at,
           max(measured_at) OVER (PARTITION BY assay, lot, constant, unit) AS latest
    FROM reference_chart
    WHERE constant = $constant AND series_standing = 'clear' AND ($assay IS NULL OR assay = $assay)
), recent AS (
    SELECT *, (epoch(measured_at) - epoch(latest)) / 31557600.0 AS years
    FROM chart WHERE measured_at >= latest - to_days(CAST($days AS INTEGER))
), line AS (
    SELECT assay, lot, constant, unit, count(*) AS plate_reads, avg(value) AS mean, stddev_samp(value) AS sd,
           min(measured_at) AS first_at, max(measured_at) AS last_at,
           CASE WHEN count(DISTINCT years) > 1 THEN regr_slope(value, years) END AS slope,
           CASE WHEN count(DISTINCT years) > 1 AND count(*) > 2
                THEN regr_syy(value, years) - pow(regr_sxy(value, years), 2) / regr_sxx(value, years) END AS rest,
           regr_sxx(value, years) AS sxx
    FROM recent GROUP BY ALL
)
SELECT assay, lot, constant, plate_reads, first_at, last_at,
       (epoch(last_at) - epoch(first_at)) / 86400.0 AS days_covered, mean, sd, unit,
       100 * slope / mean * (epoch(last_at) - epoch(first_at)) / 31557600.0 AS percent_change,
       CASE WHEN last_at - first_at >= to_days(30) THEN 100 * slope / mean END AS percent_a_year,
       CASE WHEN rest > 0 THEN slope / sqrt(rest / (plate_reads - 2) / sxx) END AS t_value
FROM line
ORDER BY assay, lot
