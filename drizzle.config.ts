import { defineConfig } from 'drizzle-kit';

export default defineConfig({
	dialect: 'postgresql',
	schema: './src/lib/server/db/schema',
	out: './drizzle',
	// Partitioned tables are written by hand as custom migrations; drizzle-kit has no words for them.
	tablesFilter: [
		'!readings',
		'!readings_*',
		'!reading_*',
		'!late_readings',
		'!rollups_*',
		'!rollup_progress',
		'!feed_journal',
		'!feed_journal_*',
		'!test_readings',
	],
});
