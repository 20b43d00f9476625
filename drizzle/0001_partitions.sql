-- Partitioned tables, functions, the application's role and its rights. Bounds are written with +00 so that no session's zone moves them.

CREATE TABLE readings (
	tag_id integer NOT NULL,
	at timestamptz(3) NOT NULL,
	value double precision,
	quality integer NOT NULL,
	received_at timestamptz(3) NOT NULL,
	is_hub_time boolean NOT NULL,
	revision integer NOT NULL,
	source_at timestamptz(3),
	reason text,
	raw text,
	-- Identity: equal in all four is the same reading (NULL is a value here).
	CONSTRAINT readings_identity UNIQUE NULLS NOT DISTINCT (tag_id, at, value, quality)
) PARTITION BY RANGE (at);
--> statement-breakpoint
COMMENT ON TABLE readings IS 'Every stored reading, one partition a UTC day. Nothing stored is ever changed.';
--> statement-breakpoint
CREATE TABLE test_readings (
	tag_id integer NOT NULL,
	at timestamptz(3) NOT NULL,
	value double precision NOT NULL,
	quality integer NOT NULL,
	PRIMARY KEY (tag_id, at)
);
--> statement-breakpoint
CREATE TABLE rollups_minute (
	tag_id integer NOT NULL,
	bucket timestamptz(3) NOT NULL,
	n integer NOT NULL,
	good_n integer NOT NULL,
	min double precision,
	max double precision,
	-- Time-weighted mean = area / covered_s.
	area double precision NOT NULL,
	covered_s double precision NOT NULL,
	last double precision,
	worst integer NOT NULL,
	PRIMARY KEY (tag_id, bucket)
) PARTITION BY RANGE (bucket);
--> statement-breakpoint
CREATE TABLE rollups_hour (LIKE rollups_minute INCLUDING COMMENTS, PRIMARY KEY (tag_id, bucket)) PARTITION BY RANGE (bucket);
--> statement-breakpoint
-- One row a commit and site: the readings that became visible together, packed (layout in src/lib/pipeline/store/journal-codec.ts), or one event.
CREATE TABLE feed_journal (
	committed_on date NOT NULL,
	site_id integer NOT NULL,
	last_position bigint NOT NULL,
	first_position bigint NOT NULL,
	committed_at timestamptz(3) NOT NULL,
	readings bytea,
	event jsonb,
	PRIMARY KEY (committed_on, site_id, last_position),
	CHECK (first_position <= last_position),
	CHECK ((readings IS NULL) <> (event IS NULL))
) PARTITION BY RANGE (committed_on);
--> statement-breakpoint
DO $$
BEGIN
	IF NOT EXISTS (SELECT FROM pg_roles WHERE rolname = 'millrace_app') THEN
		CREATE ROLE millrace_app NOLOGIN;
	END IF;
EXCEPTION WHEN duplicate_object OR unique_violation THEN
	NULL; -- another database of the same cluster made it meanwhile
END $$;
--> statement-breakpoint
-- Makes the partition of one UTC day (or month, for roll-ups) unless it is there. Created alone and then attached, so that readers and writers are not stopped.
CREATE FUNCTION ensure_partition(parent text, starts date, ends date) RETURNS boolean
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
-- Drops partitions that end at or before `edge`, at most `most` a call, oldest first; answers how many.
CREATE FUNCTION drop_partitions(parent text, edge date, most integer DEFAULT 40) RETURNS integer
LANGUAGE plpgsql SECURITY DEFINER SET search_path = public, pg_temp AS $$
DECLARE
	child record;
	n integer := 0;
	span interval := CASE WHEN parent IN ('rollups_minute', 'rollups_hour') THEN interval '1 month' ELSE interval '1 day' END;
BEGIN
	IF parent NOT IN ('readings', 'rollups_minute', 'rollups_hour', 'feed_journal') THEN
		RAISE EXCEPTION 'no partitioned table of that name: %', parent;
	END IF;
	FOR child IN
		SELECT c.relname AS name FROM pg_inherits i JOIN pg_class c ON c.oid = i.inhrelid
		WHERE i.inhparent = parent::regclass
		  AND to_date(right(c.relname, 8), 'YYYYMMDD') + span <= edge
		ORDER BY right(c.relname, 8) LIMIT most
	LOOP
		EXECUTE format('DROP TABLE %I', child.name);
		n := n + 1;
	END LOOP;
	RETURN n;
END $$;
--> statement-breakpoint
CREATE FUNCTION refuse_change() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
	RAISE EXCEPTION 'audit entries are never changed or removed';
END $$;
--> statement-breakpoint
CREATE TRIGGER audit_is_append_only BEFORE UPDATE OR DELETE ON audit_entries FOR EACH ROW EXECUTE FUNCTION refuse_change();
--> statement-breakpoint
CREATE TRIGGER audit_is_never_emptied BEFORE TRUNCATE ON audit_entries FOR EACH STATEMENT EXECUTE FUNCTION refuse_change();
--> statement-breakpoint
GRANT USAGE ON SCHEMA public TO millrace_app;
--> statement-breakpoint
GRANT SELECT, INSERT, UPDATE, DELETE ON ALL TABLES IN SCHEMA public TO millrace_app;
--> statement-breakpoint
GRANT USAGE, SELECT ON ALL SEQUENCES IN SCHEMA public TO millrace_app;
--> statement-breakpoint
REVOKE UPDATE, DELETE, TRUNCATE ON audit_entries FROM millrace_app;
--> statement-breakpoint
ALTER DEFAULT PRIVILEGES IN SCHEMA public GRANT SELECT, INSERT, UPDATE, DELETE ON TABLES TO millrace_app;
--> statement-breakpoint
ALTER DEFAULT PRIVILEGES IN SCHEMA public GRANT USAGE, SELECT ON SEQUENCES TO millrace_app;
--> statement-breakpoint
INSERT INTO installation (id) VALUES (1);
