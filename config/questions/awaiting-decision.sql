-- title: Lots that wait for a decision
-- answers: Lots with wells or series that a gate holds, how many, on which gates, and since when.
-- parameter: assay (assay, optional): One assay only
WITH held_well AS (
    SELECT assay, lot, count(*) AS wells, min(measured_at) AS since
    FROM held_wells WHERE lot IS NOT NULL GROUP BY ALL
), held_series AS (
    SELECT c.assay, s.lot, count(*) AS series, min(c.measured_at) AS since
    FROM (
        SELECT analysis_id, lot, standing FROM series
        UNION ALL
        SELECT analysis_id, lot, standing FROM grids
    ) s
    JOIN current_analyses c USING (analysis_id)
    WHERE s.standing = 'held' GROUP BY ALL
), cause AS (
    SELECT assay, lot, string_agg(DISTINCT gate, ', ' ORDER BY gate) AS gates
    FROM (
        SELECT c.assay, coalesce(f.lot, s.lot, w.lot) AS lot, f.gate
        FROM findings f
        JOIN current_analyses c USING (analysis_id)
        LEFT JOIN series s ON s.series_id = f.series_id
        LEFT JOIN wells w ON w.analysis_id = f.analysis_id
            AND (w.well = f.well OR (f.subject = 'plate_read' AND w.lot IS NOT NULL))
        WHERE f.outcome = 'breach' AND f.severity = 'hold'
    )
    WHERE lot IS NOT NULL GROUP BY ALL
)
SELECT assay, lot, coalesce(w.wells, 0) AS held_wells, coalesce(s.series, 0) AS held_series, c.gates,
       least(w.since, s.since) AS waits_since
FROM held_well w
FULL JOIN held_series s USING (assay, lot)
LEFT JOIN cause c USING (assay, lot)
WHERE $assay IS NULL OR assay = $assay
ORDER BY held_series DESC, held_wells DESC, assay, lot
