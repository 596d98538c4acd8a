-- title: Which results an export touches
-- answers: Every current constant that rests on an export, by the name of its file or the first digits of its
--     SHA-256: what to look at again when an instrument is found to be off.
-- parameter: export (text, required): Name of the file, or first digits of its SHA-256
SELECT export_file_name, plate_id, assay, lot, constant, value, unit, law, wells, estimate_id, export_id
FROM estimate_lineage
WHERE export_file_name = $export OR (length($export) >= 4 AND starts_with(export_id, lower($export)))
ORDER BY export_file_name, plate_id, lot, constant, law, wells, estimate_id
