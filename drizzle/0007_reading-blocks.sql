-- Older readings, packed: one row a tag and UTC hour. An array is null where one value stands for all of its hour.
-- The arrays are in the order (at, value with null last, quality), and what `reading_history` makes of them is equal to what was packed, bit for bit.
CREATE TABLE reading_blocks (
	tag_id integer NOT NULL,
	n integer NOT NULL CHECK (n > 0),
	hour timestamptz(3) NOT NULL,
	-- at = hour + first_ms + (place - 1) * step_ms + shift.
	first_ms integer NOT NULL,
	step_ms integer NOT NULL,
	-- received_at = at + lag_ms + lag.
	lag_ms bigint NOT NULL,
	-- value = value4, or value8, or base + (top * 2^48 + high * 2^32 + low) * step: with a power of two as the step, 8 bytes become 4, 6 or 7 without a loss.
	value_base double precision,
	value_step double precision,
	quality integer NOT NULL,
	revision integer NOT NULL,
	-- Newest revision of the block, so that blocks in a former unit are left out unread.
	last_revision integer NOT NULL,
	-- Retention rule that the block was packed under; 0 for the default.
	retention_group integer NOT NULL,
	is_hub_time boolean NOT NULL,
	shift1 "char"[] COMPRESSION lz4,
	shift2 smallint[] COMPRESSION lz4,
	shift4 integer[] COMPRESSION lz4,
	lag1 "char"[] COMPRESSION lz4,
	lag2 smallint[] COMPRESSION lz4,
	lag8 bigint[] COMPRESSION lz4,
	value_top "char"[] COMPRESSION lz4,
	value_high smallint[] COMPRESSION lz4,
	value_low integer[] COMPRESSION lz4,
	value4 real[] COMPRESSION lz4,
	value8 double precision[] COMPRESSION lz4,
	qualities integer[] COMPRESSION lz4,
	revisions integer[] COMPRESSION lz4,
	hub_times boolean[] COMPRESSION lz4,
	source_ats timestamptz(3)[] COMPRESSION lz4,
	reasons text[] COMPRESSION lz4,
	raws text[] COMPRESSION lz4,
	PRIMARY KEY (tag_id, hour, retention_group)
) PARTITION BY LIST (retention_group);
--> statement-breakpoint
COMMENT ON TABLE reading_blocks IS 'Packed readings, one row a tag and UTC hour; partitioned by retention rule, then by week, so that retention drops tables.';
--> statement-breakpoint
-- Readings that came for a day that is packed already, until they are packed too.
CREATE TABLE late_readings (LIKE readings INCLUDING COMMENTS, CONSTRAINT late_readings_identity UNIQUE NULLS NOT DISTINCT (tag_id, at, value, quality));
--> statement-breakpoint
INSERT INTO packing_state (id) VALUES (1);
--> statement-breakpoint
DROP VIEW reading_history;
--> statement-breakpoint
-- `packed_until` says which kind counts: it moves in the commit that adds a day's blocks, so no snapshot has a reading twice or misses one.
CREATE VIEW recent_readings AS
SELECT tag_id, at::timestamptz AS at, value, quality, received_at::timestamptz AS received_at, is_hub_time, revision,
	source_at::timestamptz AS source_at, reason, raw, date_bin(interval '1 hour', at, timestamptz '2000-01-01 00:00:00+00') AS hour
FROM readings WHERE at >= (SELECT packed_until FROM packing_state);
--> statement-breakpoint
CREATE VIEW unpacked_readings AS
SELECT b.tag_id,
	b.hour + (b.first_ms + (u.i - 1) * b.step_ms + coalesce(u.shift1::integer, u.shift2, u.shift4, 0)) * interval '1 millisecond' AS at,
	coalesce(u.value4, u.value8, b.value_base + (coalesce(u.value_top::integer, 0) * 281474976710656.0::float8
		+ coalesce(u.value_high, 0) * 4294967296.0::float8 + coalesce(u.value_low, 0)) * b.value_step) AS value,
	coalesce(u.quality, b.quality) AS quality,
	b.hour + (b.first_ms + (u.i - 1) * b.step_ms + coalesce(u.shift1::integer, u.shift2, u.shift4, 0)
		+ b.lag_ms + coalesce(u.lag1::integer, u.lag2, u.lag8, 0)) * interval '1 millisecond' AS received_at,
	coalesce(u.is_hub_time, b.is_hub_time) AS is_hub_time,
	coalesce(u.revision, b.revision) AS revision,
	u.source_at::timestamptz AS source_at, u.reason, u.raw, b.hour::timestamptz AS hour
FROM reading_blocks b CROSS JOIN LATERAL ROWS FROM (generate_series(1, b.n), unnest(b.shift1), unnest(b.shift2), unnest(b.shift4),
	unnest(b.lag1), unnest(b.lag2), unnest(b.lag8), unnest(b.value_top), unnest(b.value_high), unnest(b.value_low), unnest(b.value4), unnest(b.value8),
	unnest(b.qualities), unnest(b.revisions), unnest(b.hub_times), unnest(b.source_ats), unnest(b.reasons), unnest(b.raws))
	AS u (i, shift1, shift2, shift4, lag1, lag2, lag8, value_top, value_high, value_low, value4, value8, quality, revision, is_hub_time, source_at, reason, raw)
WHERE b.hour < (SELECT packed_until FROM packing_state);
--> statement-breakpoint
-- One view over all stored readings, however they are kept. `hour` is the UTC hour of `at`. Whoever reads a stretch of time gives its bounds
-- twice, so that only the blocks of that time are read:
-- at >= from AND at < to AND hour >= date_trunc('hour', from, 'UTC') AND hour < to.
CREATE VIEW reading_history AS
SELECT tag_id, at, value, quality, received_at, is_hub_time, revision, source_at, reason, raw, hour FROM recent_readings
UNION ALL
SELECT tag_id, at::timestamptz, value, quality, received_at::timestamptz, is_hub_time, revision, source_at::timestamptz, reason, raw, date_bin(interval '1 hour', at, timestamptz '2000-01-01 00:00:00+00') AS hour
FROM late_readings
UNION ALL
SELECT tag_id, at, value, quality, received_at, is_hub_time, revision, source_at, reason, raw, hour FROM unpacked_readings;
--> statement-breakpoint
-- The rule that holds for each tag: the narrowest; a site's before a quantity's.
CREATE VIEW tag_retention AS
SELECT t.id AS tag_id, coalesce(r.id, 0) AS retention_group, r.raw_days
FROM tags t LEFT JOIN LATERAL (
	SELECT id, raw_days FROM retention_rules
	WHERE (site_id IS NULL OR site_id = t.site_id) AND (quantity IS NULL OR quantity = t.quantity)
	ORDER BY (site_id IS NOT NULL) DESC, (quantity IS NOT NULL) DESC LIMIT 1) r ON true;
--> statement-breakpoint
-- Makes the week's table of blocks of one rule unless it is there. Weeks begin on Monday, UTC.
CREATE FUNCTION ensure_block_partition(in_group integer, at timestamptz) RETURNS boolean
LANGUAGE plpgsql SECURITY DEFINER SET search_path = public, pg_temp SET timezone = 'UTC' AS $$
DECLARE
	starts timestamptz := date_trunc('week', at, 'UTC');
	parent text := 'reading_blocks_g' || in_group;
	child text := parent || '_' || to_char(starts, 'YYYYMMDD');
BEGIN
	IF to_regclass(child) IS NOT NULL THEN
		RETURN false;
	END IF;
	PERFORM pg_advisory_xact_lock(hashtext('ensure_partition reading_blocks'));
	IF to_regclass(child) IS NOT NULL THEN
		RETURN false;
	END IF;
	IF to_regclass(parent) IS NULL THEN
		EXECUTE format('CREATE TABLE %I (LIKE reading_blocks INCLUDING ALL) PARTITION BY RANGE (hour)', parent);
		EXECUTE format('ALTER TABLE reading_blocks ATTACH PARTITION %I FOR VALUES IN (%s)', parent, in_group);
		EXECUTE format('GRANT SELECT, INSERT, UPDATE, DELETE ON %I TO millrace_app', parent);
	END IF;
	EXECUTE format('CREATE TABLE %I (LIKE %I INCLUDING ALL)', child, parent);
	EXECUTE format('ALTER TABLE %I ATTACH PARTITION %I FOR VALUES FROM (%L) TO (%L)', parent, child, starts, starts + interval '7 days');
	EXECUTE format('ALTER TABLE %I SET (autovacuum_vacuum_insert_scale_factor = 0.05, autovacuum_analyze_scale_factor = 0.02)', child);
	EXECUTE format('GRANT SELECT, INSERT, UPDATE, DELETE ON %I TO millrace_app', child);
	RETURN true;
END $$;
--> statement-breakpoint
-- Drops weeks of blocks that end at or before their rule's edge, at most `most` a call; answers how many.
CREATE FUNCTION drop_expired_blocks(wall_clock timestamptz, default_days integer, most integer DEFAULT 40) RETURNS integer
LANGUAGE plpgsql SECURITY DEFINER SET search_path = public, pg_temp SET timezone = 'UTC' AS $$
DECLARE
	child record;
	n integer := 0;
BEGIN
	PERFORM set_config('lock_timeout', '2s', true);
	FOR child IN
		WITH weeks AS MATERIALIZED (
			SELECT c.relname AS name FROM pg_inherits top JOIN pg_inherits i ON i.inhparent = top.inhrelid JOIN pg_class c ON c.oid = i.inhrelid
			WHERE top.inhparent = 'reading_blocks'::regclass AND c.relname ~ '^reading_blocks_g[0-9]+_[0-9]{8}$'
		), dated AS MATERIALIZED (
			SELECT name, substring(name FROM '_g([0-9]+)_')::integer AS in_group, to_date(right(name, 8), 'YYYYMMDD')::timestamptz + interval '7 days' AS ends FROM weeks
		)
		SELECT d.name FROM dated d LEFT JOIN retention_rules r ON r.id = d.in_group
		WHERE d.ends <= wall_clock - make_interval(days => coalesce(r.raw_days, default_days)) ORDER BY d.ends LIMIT most
	LOOP
		EXECUTE format('DROP TABLE %I', child.name);
		n := n + 1;
	END LOOP;
	RETURN n;
END $$;
--> statement-breakpoint
-- Drops the row tables of days that are packed, once no transaction is left that began before they were; answers how many.
CREATE FUNCTION drop_packed_days() RETURNS integer
LANGUAGE plpgsql SECURITY DEFINER SET search_path = public, pg_temp SET timezone = 'UTC' AS $$
DECLARE
	child record;
	n integer := 0;
BEGIN
	PERFORM set_config('lock_timeout', '2s', true);
	FOR child IN
		WITH children AS MATERIALIZED (
			SELECT c.relname AS name FROM pg_inherits i JOIN pg_class c ON c.oid = i.inhrelid
			WHERE i.inhparent = 'readings'::regclass AND c.relname ~ '^readings_[0-9]{8}$'
		), dated AS MATERIALIZED (SELECT name, to_date(right(name, 8), 'YYYYMMDD') AS day FROM children)
		SELECT d.name FROM dated d JOIN packed_days p ON p.day = d.day, packing_state s
		WHERE (d.day + 1)::timestamptz <= s.packed_until AND NOT EXISTS (
			SELECT FROM pg_stat_activity a WHERE a.datname = current_database() AND a.pid <> pg_backend_pid() AND (a.xact_start <= p.packed_at
				-- Sessions that may not be looked at are given an hour.
				OR (a.query = '<insufficient privilege>' AND p.packed_at > clock_timestamp() - interval '1 hour')))
		ORDER BY d.name
	LOOP
		EXECUTE format('DROP TABLE %I', child.name);
		n := n + 1;
	END LOOP;
	RETURN n;
END $$;
--> statement-breakpoint
-- A row for a day that is closed would be read by nobody, so its table is not made again: such a reading is a late one.
CREATE OR REPLACE FUNCTION ensure_partition(parent text, starts date, ends date) RETURNS boolean
LANGUAGE plpgsql SECURITY DEFINER SET search_path = public, pg_temp AS $$
DECLARE
	child text := parent || '_' || to_char(starts, 'YYYYMMDD');
	col text;
	lower_bound text;
	upper_bound text;
BEGIN
	IF parent NOT IN ('readings', 'rollups_minute', 'rollups_hour', 'feed_journal') THEN
		RAISE EXCEPTION 'no partitioned table of that name: %', parent;
	END IF;
	-- Two creators take turns; the second finds the work done.
	PERFORM pg_advisory_xact_lock(hashtext('ensure_partition ' || child));
	IF to_regclass(child) IS NOT NULL THEN
		RETURN false;
	END IF;
	IF parent = 'readings' AND starts::timestamp AT TIME ZONE 'UTC' < (SELECT closed_until FROM packing_state) THEN
		RETURN false;
	END IF;
	IF parent = 'feed_journal' THEN
		lower_bound := quote_literal(starts::text);
		upper_bound := quote_literal(ends::text);
	ELSE
		lower_bound := quote_literal(starts::text || ' 00:00:00+00');
		upper_bound := quote_literal(ends::text || ' 00:00:00+00');
	END IF;
	EXECUTE format('CREATE TABLE %I (LIKE %I INCLUDING ALL)', child, parent);
	col := CASE parent WHEN 'readings' THEN 'at' WHEN 'feed_journal' THEN 'committed_on' ELSE 'bucket' END;
	EXECUTE format('ALTER TABLE %I ATTACH PARTITION %I FOR VALUES FROM (%s) TO (%s)', parent, child, lower_bound, upper_bound);
	-- An insert-only table is never vacuumed by updates; closed days want their visibility map for index-only scans.
	EXECUTE format('ALTER TABLE %I SET (autovacuum_vacuum_insert_scale_factor = 0.05, autovacuum_analyze_scale_factor = 0.02)', child);
	EXECUTE format('GRANT SELECT, INSERT, UPDATE, DELETE ON %I TO millrace_app', child);
	RETURN true;
END $$;
--> statement-breakpoint
GRANT SELECT, INSERT, UPDATE, DELETE ON reading_blocks, late_readings TO millrace_app;
--> statement-breakpoint
GRANT SELECT ON recent_readings, unpacked_readings, reading_history, tag_retention TO millrace_app;
