-- title: Lots slower than the reference
-- answers: Lots whose turnover (kcat, or specific activity where no molar amount is known) lies below that of the
--     assay's reference lot by at least so many percent, as both stand after the latest pass. surely says whether
--     even the ends of both 95 % intervals leave the lot slower: a screen, not the test that decides on a lot.
-- parameter: percent (number, default 10): How much slower, in percent of the reference
-- parameter: assay (assay, optional): One assay only
WITH turnover AS (
    SELECT *, row_number() OVER (PARTITION BY assay, lot ORDER BY constant = 'kcat' DESC) AS place
    FROM lot_latest
    WHERE constant IN ('kcat', 'specific_activity') AND modulator IS NULL AND value IS NOT NULL
)
SELECT l.lot, r.lot AS reference, l.constant, l.value, r.value AS of_reference, l.unit,
       100 * (1 - l.value / r.value) AS slower_by_percent, l.high < r.low AS surely, l.standing
FROM turnover l
JOIN turnover r ON r.assay = l.assay AND r.constant = l.constant AND r.role = 'reference' AND r.place = 1
WHERE l.role = 'sample' AND l.place = 1 AND l.value <= r.value * (1 - $percent / 100.0)
  AND ($assay IS NULL OR l.assay = $assay)
ORDER BY slower_by_percent DESC, l.assay, l.lot
