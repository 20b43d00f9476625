// Edge: metrics. May touch: prom-client, the web pool (select only).
import { Gauge, Registry, type OpenMetricsContentType } from 'prom-client';
import type { Pool } from '#lib/server/db/pool.ts';

/** What the database knows of collectors, sources, alarms and feeds, as gauges read at this moment. */
export async function readPlantMetrics(pool: Pool): Promise<Registry<OpenMetricsContentType>> {
	const registry = new Registry<OpenMetricsContentType>();
	registry.setContentType(Registry.OPENMETRICS_CONTENT_TYPE);
	const gauge = (name: string, help: string, labelNames: string[] = []) =>
		new Gauge({ name, help, labelNames, registers: [registry] });

	const collectors = await pool.query<{ instance: string; age: number; stats: Record<string, number> }>(
		`SELECT instance, extract(epoch FROM now() - heartbeat_at)::float8 AS age, stats FROM collectors WHERE heartbeat_at > now() - interval '1 hour'`,
	);
	const heartbeat = gauge('millrace_collector_heartbeat_age_seconds', 'Seconds since a collector was last heard of.', [
		'instance',
	]);
	const stats = gauge('millrace_collector_stat', 'What a collector says of itself, by name.', ['instance', 'stat']);
	for (const { instance, age, stats: values } of collectors.rows) {
		heartbeat.set({ instance }, age);
		for (const [stat, value] of Object.entries(values)) if (typeof value === 'number') stats.set({ instance, stat }, value);
	}

	const sources = await pool.query<Record<string, number | string | null>>(
		`SELECT si.slug AS site, so.name AS source, (h.state = 'ok')::int AS up, h.good::float8, h.bad::float8, h.dropped::float8, h.duplicates::float8,
		        h.requests::float8, h.failures::float8, h.reconnects::float8, h.tags, h.stale_tags, extract(epoch FROM now() - h.last_good_at)::float8 AS age
		 FROM source_health h JOIN sources so ON so.id = h.source_id JOIN sites si ON si.id = so.site_id WHERE so.deleted_at IS NULL`,
	);
	const bySource = ['site', 'source'];
	const figures: [column: string, gauge: Gauge][] = [
		['up', gauge('millrace_source_up', '1 while the source gives good data in time.', bySource)],
		['good', gauge('millrace_source_good_readings', 'Good readings since the source began.', bySource)],
		['bad', gauge('millrace_source_bad_readings', 'Bad readings since the source began.', bySource)],
		['dropped', gauge('millrace_source_dropped_samples', 'Samples dropped, each counted and told.', bySource)],
		['duplicates', gauge('millrace_source_duplicate_readings', 'Readings that were stored already.', bySource)],
		['requests', gauge('millrace_source_requests', 'Requests made or messages received.', bySource)],
		['failures', gauge('millrace_source_failures', 'Requests that failed.', bySource)],
		['reconnects', gauge('millrace_source_reconnects', 'Connections made anew.', bySource)],
		['tags', gauge('millrace_source_tags', 'Tags read from the source.', bySource)],
		['stale_tags', gauge('millrace_source_stale_tags', 'Tags without a reading in time.', bySource)],
		['age', gauge('millrace_source_last_good_age_seconds', 'Seconds since the last good reading.', bySource)],
	];
	for (const row of sources.rows) {
		for (const [column, figure] of figures) {
			const value = row[column];
			if (typeof value === 'number') figure.set({ site: String(row.site), source: String(row.source) }, value);
		}
	}

	const alarms = await pool.query<{ site: string; level: string; n: number }>(
		`SELECT si.slug AS site, a.level, count(*)::int AS n FROM alarms a JOIN sites si ON si.id = a.site_id
		 WHERE a.cleared_at IS NULL AND NOT a.is_test GROUP BY 1, 2`,
	);
	const open = gauge('millrace_alarms_open', 'Alarms whose condition stands.', ['site', 'level']);
	for (const { site, level, n } of alarms.rows) open.set({ site, level }, n);

	const feeds = await pool.query<{ site: string; position: number }>(
		'SELECT si.slug AS site, f.position::float8 FROM feed_heads f JOIN sites si ON si.id = f.site_id',
	);
	const position = gauge('millrace_feed_position', 'Readings and events given to the feed.', ['site']);
	for (const row of feeds.rows) position.set({ site: row.site }, row.position);

	const waiting = await pool.query<{ channel: string; n: number }>(
		`SELECT channel, count(*)::int AS n FROM outbox WHERE state = 'waiting' GROUP BY 1`,
	);
	const outbox = gauge('millrace_outbox_waiting', 'Messages not sent yet.', ['channel']);
	for (const { channel, n } of waiting.rows) outbox.set({ channel }, n);
	return registry;
}
