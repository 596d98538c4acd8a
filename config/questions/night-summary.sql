-- title: What each night brought
-- answers: Of the latest passes: exports and maps accepted, files put into quarantine, plate reads analysed, wells
--     with enzyme held and void, and the gate that spoke most; current results only, so that what a later pass
--     computed again counts there.
-- parameter: nights (integer, default 14): How many passes, the latest first
WITH well AS (
    SELECT c.pass_id, count(*) AS wells, count(*) FILTER (w.standing = 'held') AS held,
           count(*) FILTER (w.standing = 'void') AS void
    FROM current_analyses c
    JOIN wells w USING (analysis_id)
    WHERE w.role IN ('sample', 'reference') GROUP BY ALL
), gate AS (
    SELECT c.pass_id, f.gate, count(*) AS findings
    FROM current_analyses c
    JOIN findings f USING (analysis_id)
    WHERE f.outcome = 'breach' GROUP BY c.pass_id, f.gate
    QUALIFY row_number() OVER (PARTITION BY c.pass_id ORDER BY count(*) DESC, f.gate) = 1
)
SELECT p.started_at, p.export_count, p.map_count, p.quarantined_count, p.analysis_count, w.wells, w.held,
       w.void, g.gate AS commonest_gate, g.findings AS its_findings, p.pass_id
FROM passes p
LEFT JOIN well w USING (pass_id)
LEFT JOIN gate g USING (pass_id)
ORDER BY p.started_at DESC, p.pass_id
LIMIT CAST($nights AS BIGINT)
