-- Drops partitions that end at or before `edge`, at most `most` a call, oldest first; answers how many.
-- The names are read in a step of their own: a planner may otherwise ask every relation of the database for the date in its name.
CREATE OR REPLACE FUNCTION drop_partitions(parent text, edge date, most integer DEFAULT 40) RETURNS integer
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
