// Edge: source setup. May touch: source, health, event, exchange and minute tables, to read. Secrets never leave here.
import type { Pool } from '#lib/server/db/pool.ts';
import { SOURCE_COLUMNS, toShown, type SourceRow, type SourceShown } from './source-record.ts';

/** Sources of a site by name. */
export async function listSources(pool: Pool, siteId: number): Promise<SourceShown[]> {
	const found = await pool.query<SourceRow>(
		`SELECT ${SOURCE_COLUMNS} FROM sources WHERE site_id = $1 AND deleted_at IS NULL ORDER BY lower(name)`,
		[siteId],
	);
	return found.rows.map(toShown);
}

const UUID = /^[0-9a-f]{8}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{12}$/i;

/** One source of a site, or null; any text may be asked for. */
export async function findSource(pool: Pool, siteId: number, id: string): Promise<SourceShown | null> {
	const row = await findSourceRow(pool, siteId, id);
	return row ? toShown(row) : null;
}

/** With secrets; for tests and looks, never for an answer. */
export async function findSourceRow(pool: Pool, siteId: number, id: string): Promise<SourceRow | null> {
	if (!UUID.test(id)) return null;
	const found = await pool.query<SourceRow>(
		`SELECT ${SOURCE_COLUMNS} FROM sources WHERE id = $1 AND site_id = $2 AND deleted_at IS NULL`,
		[id, siteId],
	);
	return found.rows[0] ?? null;
}

export interface SourceHealth {
	state: 'ok' | 'late' | 'lost' | 'waiting' | 'off';
	since: string | null;
	advice: { code: string; text: string; check: string } | null;
	last_good_at: string | null;
	subscribed_at: string | null;
	good: number;
	bad: number;
	duplicates: number;
	dropped: number;
	requests: number;
	failures: number;
	reconnects: number;
	tags: number;
	stale_tags: number;
	latency_p50_ms: number | null;
	latency_p95_ms: number | null;
	clock_skew_ms: number | null;
	minutes: {
		minute: string;
		good: number;
		bad: number;
		requests: number;
		failures: number;
		reconnects: number;
		latency_p50_ms: number | null;
		latency_p95_ms: number | null;
	}[];
	events: { at: string; level: 'note' | 'warning' | 'error'; code: string; text: string }[];
	exchanges: { at: string; direction: 'out' | 'in' | 'none'; bytes: string; meaning: string; failed: boolean }[];
}

type HealthRow = Omit<SourceHealth, 'since' | 'last_good_at' | 'subscribed_at' | 'minutes' | 'events' | 'exchanges'> & {
	since: Date;
	last_good_at: Date | null;
	subscribed_at: Date | null;
	is_owned: boolean | null;
};

const text = (at: Date | null) => at?.toISOString() ?? null;

/** How a source is, with its counts by minute over [from, to), its last events and the exchanges around failures. */
export async function findHealth(pool: Pool, source: SourceShown, range: { from: number; to: number }): Promise<SourceHealth> {
	const health = await pool.query<HealthRow>(
		`SELECT h.*, (SELECT until > clock_timestamp() FROM source_leases l WHERE l.source_id = h.source_id AND l.owner IS NOT NULL) AS is_owned FROM source_health h WHERE source_id = $1`,
		[source.id],
	);
	const row = health.rows[0];
	const minutes = await pool.query(
		'SELECT * FROM source_minutes WHERE source_id = $1 AND minute >= $2 AND minute < $3 ORDER BY minute LIMIT 10000',
		[source.id, new Date(range.from).toISOString(), new Date(range.to).toISOString()],
	);
	const events = await pool.query(
		'SELECT at, level, code, text FROM source_events WHERE source_id = $1 ORDER BY id DESC LIMIT 100',
		[source.id],
	);
	const exchanges = await pool.query(
		'SELECT at, direction, bytes, meaning, failed FROM source_exchanges WHERE source_id = $1 ORDER BY at DESC, id DESC LIMIT 100',
		[source.id],
	);
	const isUnowned = row !== undefined && row.is_owned !== true;
	return {
		state: !source.enabled ? 'off' : !row ? 'waiting' : isUnowned ? 'lost' : row.state,
		since: row ? text(row.since) : null,
		advice:
			isUnowned && source.enabled
				? {
						code: 'no-collector',
						text: 'No collector runs this source.',
						check: 'Check that the collector process runs and reaches the database.',
					}
				: (row?.advice ?? null),
		last_good_at: row ? text(row.last_good_at) : null,
		subscribed_at: row ? text(row.subscribed_at) : null,
		good: row?.good ?? 0,
		bad: row?.bad ?? 0,
		duplicates: row?.duplicates ?? 0,
		dropped: row?.dropped ?? 0,
		requests: row?.requests ?? 0,
		failures: row?.failures ?? 0,
		reconnects: row?.reconnects ?? 0,
		tags: row?.tags ?? 0,
		stale_tags: row?.stale_tags ?? 0,
		latency_p50_ms: row?.latency_p50_ms ?? null,
		latency_p95_ms: row?.latency_p95_ms ?? null,
		clock_skew_ms: row?.clock_skew_ms ?? null,
		minutes: minutes.rows.map(({ minute, good, bad, requests, failures, reconnects, latency_p50_ms, latency_p95_ms }) => ({
			minute: minute.toISOString(),
			good,
			bad,
			requests,
			failures,
			reconnects,
			latency_p50_ms,
			latency_p95_ms,
		})),
		events: events.rows.map(({ at, ...rest }) => ({ at: at.toISOString(), ...rest })),
		exchanges: exchanges.rows.map(({ at, ...rest }) => ({ at: at.toISOString(), ...rest })),
	};
}
