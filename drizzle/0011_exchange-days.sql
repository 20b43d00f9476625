-- Exchanges around failures by day, so that retention drops tables and deletes no rows.
CREATE OR REPLACE FUNCTION ensure_partition(parent text, starts date, ends date) RETURNS boolean
LANGUAGE plpgsql SECURITY DEFINER SET search_path = public, pg_temp AS $$
DECLARE
	child text := parent || '_' || to_char(starts, 'YYYYMMDD');
	col text;
	lower_bound text;
	upper_bound text;
BEGIN
	IF parent NOT IN ('readings', 'rollups_minute', 'rollups_hour', 'feed_journal', 'source_exchanges') THEN
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
	col := CASE parent WHEN 'readings' THEN 'at' WHEN 'source_exchanges' THEN 'at' WHEN 'feed_journal' THEN 'committed_on' ELSE 'bucket' END;
	EXECUTE format('ALTER TABLE %I ATTACH PARTITION %I FOR VALUES FROM (%s) TO (%s)', parent, child, lower_bound, upper_bound);
	-- An insert-only table is never vacuumed by updates; closed days want their visibility map for index-only scans.
	EXECUTE format('ALTER TABLE %I SET (autovacuum_vacuum_insert_scale_factor = 0.05, autovacuum_analyze_scale_factor = 0.02)', child);
	EXECUTE format('GRANT SELECT, INSERT, UPDATE, DELETE ON %I TO millrace_app', child);
	RETURN true;
END $$;
--> statement-breakpoint
-- Drops partitions that end at or before `edge`, at most `most` a call, oldest first; answers how many.
-- The names are read in a step of their own: a planner may otherwise ask every relation of the database for the date in its name.
CREATE OR REPLACE FUNCTION drop_partitions(parent text, edge date, most integer DEFAULT 40) RETURNS integer
LANGUAGE plpgsql SECURITY DEFINER SET search_path = public, pg_temp AS $$
DECLARE
	child record;
	n integer := 0;
	span interval := CASE WHEN parent IN ('rollups_minute', 'rollups_hour') THEN interval '1 month' ELSE interval '1 day' END;
BEGIN
	-- A long reader delays the drop, never the readers behind it for long; the next run tries again.
	PERFORM set_config('lock_timeout', '2s', true);
	IF parent NOT IN ('readings', 'rollups_minute', 'rollups_hour', 'feed_journal', 'source_exchanges') THEN
		RAISE EXCEPTION 'no partitioned table of that name: %', parent;
	END IF;
	FOR child IN
		WITH children AS MATERIALIZED (
			SELECT c.relname AS name FROM pg_inherits i JOIN pg_class c ON c.oid = i.inhrelid WHERE i.inhparent = parent::regclass
		)
		SELECT name FROM children
		WHERE CASE WHEN name ~ '_[0-9]{8}$' THEN to_date(right(name, 8), 'YYYYMMDD') + span <= edge ELSE false END
		ORDER BY right(name, 8) LIMIT most
	LOOP
		EXECUTE format('DROP TABLE %I', child.name);
		n := n + 1;
	END LOOP;
	RETURN n;
END $$;
--> statement-breakpoint
ALTER TABLE source_exchanges RENAME TO source_exchanges_before;
--> statement-breakpoint
ALTER TABLE source_exchanges_before RENAME CONSTRAINT source_exchanges_pkey TO source_exchanges_before_pkey;
--> statement-breakpoint
DROP INDEX source_exchanges_by_source;
--> statement-breakpoint
CREATE SEQUENCE source_exchanges_number;
--> statement-breakpoint
CREATE TABLE source_exchanges (
	id bigint NOT NULL DEFAULT nextval('source_exchanges_number'),
	source_id uuid NOT NULL,
	at timestamptz NOT NULL,
	direction text NOT NULL,
	bytes text NOT NULL,
	meaning text NOT NULL,
	failed boolean NOT NULL,
	PRIMARY KEY (id, at)
) PARTITION BY RANGE (at);
--> statement-breakpoint
CREATE INDEX source_exchanges_by_source ON source_exchanges (source_id, at DESC, id DESC);
--> statement-breakpoint
GRANT SELECT, INSERT, UPDATE, DELETE ON source_exchanges TO millrace_app;
--> statement-breakpoint
GRANT USAGE, SELECT ON SEQUENCE source_exchanges_number TO millrace_app;
--> statement-breakpoint
DO $$
DECLARE
	one date;
BEGIN
	FOR one IN SELECT DISTINCT (at AT TIME ZONE 'UTC')::date FROM source_exchanges_before LOOP
		PERFORM ensure_partition('source_exchanges', one, one + 1);
	END LOOP;
	INSERT INTO source_exchanges (source_id, at, direction, bytes, meaning, failed)
	SELECT source_id, at, direction, bytes, meaning, failed FROM source_exchanges_before ORDER BY id;
END $$;
--> statement-breakpoint
DROP TABLE source_exchanges_before;
