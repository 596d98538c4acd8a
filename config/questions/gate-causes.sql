-- title: What gates found, by instrument and month
-- answers: How many findings each gate made and on what share of the plate reads, for every way in which exports
--     are written. The export profile stands for the instrument: two instruments that write alike are one here.
-- parameter: since (date, optional): First day
-- parameter: until (date, optional): Last day
-- parameter: gate (text, optional): One gate only
WITH plate_read AS (
    SELECT c.analysis_id, coalesce(f.profile, 'unknown') AS profile,
           strftime(c.measured_at, '%Y-%m') AS month
    FROM current_analyses c
    LEFT JOIN files f ON f.file_id = c.export_id
    WHERE ($since IS NULL OR c.measured_at::DATE >= CAST($since AS DATE))
      AND ($until IS NULL OR c.measured_at::DATE <= CAST($until AS DATE))
), total AS (
    SELECT profile, month, count(*) AS plate_reads FROM plate_read GROUP BY ALL
)
SELECT p.month, p.profile, g.gate, count(*) AS findings, count(DISTINCT p.analysis_id) AS plate_reads,
       100.0 * count(DISTINCT p.analysis_id) / t.plate_reads AS percent_of_reads
FROM findings g
JOIN plate_read p USING (analysis_id)
JOIN total t ON t.profile = p.profile AND t.month = p.month
WHERE g.outcome = 'breach' AND ($gate IS NULL OR g.gate = $gate)
GROUP BY p.month, p.profile, g.gate, t.plate_reads
ORDER BY p.month, p.profile, findings DESC, g.gate
