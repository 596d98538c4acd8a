-- title: Assays by how much is held
-- answers: Of each assay: plate reads, wells with enzyme, the shares held and void, and the gate that holds most.
--     An assay at the top has limits, levels or a robot that do not suit it.
-- parameter: since (date, optional): First day
-- parameter: until (date, optional): Last day
WITH plate_read AS (
    SELECT * FROM current_analyses
    WHERE ($since IS NULL OR measured_at::DATE >= CAST($since AS DATE))
      AND ($until IS NULL OR measured_at::DATE <= CAST($until AS DATE))
), well AS (
    SELECT c.assay, count(DISTINCT c.analysis_id) AS plate_reads, count(*) AS wells,
           count(*) FILTER (w.standing = 'held') AS held, count(*) FILTER (w.standing = 'void') AS void
    FROM plate_read c
    JOIN wells w USING (analysis_id)
    WHERE w.role IN ('sample', 'reference') GROUP BY ALL
), gate AS (
    SELECT c.assay, f.gate, count(*) AS findings
    FROM plate_read c
    JOIN findings f USING (analysis_id)
    WHERE f.outcome = 'breach' GROUP BY ALL
), first_gate AS (
    SELECT assay, gate, findings FROM gate
    QUALIFY row_number() OVER (PARTITION BY assay ORDER BY findings DESC, gate) = 1
)
SELECT w.assay, w.plate_reads, w.wells, w.held, w.void, 100.0 * w.held / w.wells AS percent_held,
       100.0 * w.void / w.wells AS percent_void, g.gate AS commonest_gate, g.findings AS its_findings
FROM well w
LEFT JOIN first_gate g USING (assay)
ORDER BY percent_held DESC, w.assay
