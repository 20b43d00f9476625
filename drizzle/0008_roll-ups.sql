-- A bucket holds one unit: rows of a unit that a tag had before stay, and no answer takes them. The tables are empty up to here.
ALTER TABLE rollups_minute ADD COLUMN unit_revision integer NOT NULL DEFAULT 0;
--> statement-breakpoint
ALTER TABLE rollups_minute DROP CONSTRAINT rollups_minute_pkey, ADD PRIMARY KEY (tag_id, bucket, unit_revision);
--> statement-breakpoint
ALTER TABLE rollups_hour ADD COLUMN unit_revision integer NOT NULL DEFAULT 0;
--> statement-breakpoint
ALTER TABLE rollups_hour DROP CONSTRAINT rollups_hour_pkey, ADD PRIMARY KEY (tag_id, bucket, unit_revision);
--> statement-breakpoint
-- How far the roll-ups of a site are: the place in its feed's journal, and up to when readers may go by them.
CREATE TABLE rollup_progress (
	site_id integer PRIMARY KEY REFERENCES sites (id),
	position bigint NOT NULL,
	minute_until timestamptz(3) NOT NULL,
	closed_until timestamptz(3) NOT NULL,
	-- Days still to be made whole, for a store whose journal no longer reaches back.
	backfill_day date,
	backfill_until date
);
--> statement-breakpoint
GRANT SELECT, INSERT, UPDATE, DELETE ON rollup_progress TO millrace_app;
