-- title: Wells lost by row and column
-- answers: For each row and each column of the plates of one format, how many wells with enzyme were held or
--     void, and of how many: a bad tip shows as a column, a door or a heater as a row.
-- parameter: plate_format (integer, default 96): 96, 384 or 1536
-- parameter: assay (assay, optional): One assay only
-- parameter: since (date, optional): First day
WITH one AS (
    SELECT w.row_number, w.column_number, w.standing
    FROM wells w
    JOIN current_analyses c USING (analysis_id)
    JOIN plate_reads p ON p.plate_read_id = c.plate_read_id
    WHERE w.role IN ('sample', 'reference') AND p.plate_format = $plate_format
      AND ($assay IS NULL OR c.assay = $assay)
      AND ($since IS NULL OR c.measured_at::DATE >= CAST($since AS DATE))
)
SELECT CASE WHEN row_number IS NULL THEN 'column' ELSE 'row' END AS line,
       coalesce(row_number, column_number) AS number,
       count(*) AS wells, count(*) FILTER (standing = 'held') AS held, count(*) FILTER (standing = 'void') AS void,
       100.0 * count(*) FILTER (standing <> 'clear') / count(*) AS percent_lost
FROM one
GROUP BY GROUPING SETS ((row_number), (column_number))
ORDER BY percent_lost DESC, line, number
