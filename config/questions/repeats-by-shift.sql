-- title: Plates read again, by shift
-- answers: How often a plate had to be read again, and how many plate reads were held or void, by the shift in
--     which the read began. Exports name no operator: the hour of the day is the nearest that they tell.
-- parameter: shift_hours (integer, default 8): Length of a shift in hours
-- parameter: first_hour (integer, default 6): Hour at which the first shift begins
-- parameter: utc_offset_hours (number, default 0): Hours by which the site's clock is ahead of UTC
-- parameter: since (date, optional): First day
WITH one AS (
    SELECT c.assay, c.plate_id, c.standing,
           c.measured_at + to_minutes(CAST(60 * $utc_offset_hours AS INTEGER)) AS local_at,
           row_number() OVER (
               PARTITION BY c.assay, c.plate_id ORDER BY c.measured_at, c.export_id, c.place_in_export
           ) AS place
    FROM current_analyses c
), shift AS (
    SELECT *, ((date_part('hour', local_at) - $first_hour + 24) % 24) // $shift_hours AS number
    FROM one WHERE $since IS NULL OR local_at::DATE >= CAST($since AS DATE)
)
SELECT CAST(($first_hour + number * $shift_hours) % 24 AS INTEGER) AS shift_from_hour,
       count(*) AS plate_reads, count(*) FILTER (place > 1) AS read_again,
       100.0 * count(*) FILTER (place > 1) / count(*) AS percent_read_again,
       count(*) FILTER (standing <> 'clear') AS held_or_void,
       100.0 * count(*) FILTER (standing <> 'clear') / count(*) AS percent_held_or_void
FROM shift
GROUP BY number
ORDER BY number
