-- One view over all stored readings, however they are kept. `hour` is the UTC hour of `at`. Whoever reads a stretch of time gives its bounds
-- twice, so that what is kept by the hour is read only where it is needed:
-- at >= from AND at < to AND hour >= date_trunc('hour', from, 'UTC') AND hour < to.
CREATE VIEW reading_history AS
SELECT tag_id, at, value, quality, received_at, is_hub_time, revision, source_at, reason, raw,
	date_bin(interval '1 hour', at, timestamptz '2000-01-01 00:00:00+00') AS hour
FROM readings;
