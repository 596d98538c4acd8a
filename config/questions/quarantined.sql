-- title: Files that could not be read
-- answers: What was put into quarantine, when, and why.
-- parameter: since (date, optional): First day
SELECT received_at, file_name, reason, byte_count, file_id
FROM files
WHERE kind = 'quarantined' AND ($since IS NULL OR received_at::DATE >= CAST($since AS DATE))
ORDER BY received_at DESC, file_name
