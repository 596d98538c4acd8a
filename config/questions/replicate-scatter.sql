-- title: Scatter of replicate rates by month
-- answers: The pooled coefficient of variation of the rates of replicate wells (same plate read, lot, enzyme,
--     modulator and substrate, clear ones only), by assay and month: pipetting that gets worse shows here first.
-- parameter: assay (assay, optional): One assay only
-- parameter: since (date, optional): First day
WITH level AS (
    SELECT c.assay, date_trunc('month', c.measured_at)::DATE AS month, c.analysis_id,
           count(*) AS n, avg(r.v0_um_per_s) AS mean, var_samp(r.v0_um_per_s) AS variance
    FROM rates r
    JOIN wells w USING (analysis_id, well)
    JOIN current_analyses c USING (analysis_id)
    WHERE w.role IN ('sample', 'reference') AND w.standing = 'clear' AND r.v0_um_per_s IS NOT NULL
      AND ($assay IS NULL OR c.assay = $assay)
      AND ($since IS NULL OR c.measured_at::DATE >= CAST($since AS DATE))
    GROUP BY c.assay, c.measured_at, c.analysis_id, w.series_id, w.lot, w.substrate_um, w.enzyme_nm,
             w.enzyme_ng_per_ml, w.modulator, w.modulator_um
    HAVING count(*) > 1 AND avg(r.v0_um_per_s) > 0
)
SELECT month, assay, count(DISTINCT analysis_id) AS plate_reads, count(*) AS levels,
       CAST(sum(n) AS BIGINT) AS wells,
       100 * sqrt(sum((n - 1) * variance / (mean * mean)) / sum(n - 1)) AS pooled_cv_percent,
       100 * max(sqrt(variance) / mean) AS worst_cv_percent
FROM level
GROUP BY ALL
ORDER BY month, assay
