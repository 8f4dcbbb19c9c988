-- One row a photo; observed and inspected_at are NULL until the desk has looked.
SELECT p.parcel, p.decided_at, p.model_version, p.depot, p.predicted, i.observed, i.inspected_at
FROM photos AS p
LEFT JOIN inspections AS i ON i.parcel = p.parcel
