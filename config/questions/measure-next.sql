-- title: What to measure next
-- answers: Series that are held because their substrate levels do not reach far enough, with the levels that
--     would settle them and what these would bring.
-- parameter: assay (assay, optional): One assay only
SELECT c.assay, s.lot, c.plate_id, g.gates, g.substrate_um, g.replicates, g.settles, g.sentence
FROM suggestions g
JOIN series s USING (series_id)
JOIN current_analyses c ON c.analysis_id = s.analysis_id
WHERE $assay IS NULL OR c.assay = $assay
ORDER BY c.assay, s.lot, c.measured_at, c.plate_id, g.place
