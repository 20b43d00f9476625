// Edge: pulse. May touch: web pool, select only.
import type { Pool } from '#lib/server/db/pool.ts';

/** How a source is, as its page and the list show it. Secrets are never selected. */
export interface SourceOverview {
	id: string;
	name: string;
	kind: 'opcua' | 'modbus' | 'mqtt';
	enabled: boolean;
	settings: Record<string, unknown>;
	contact: string | null;
	notes: string | null;
	version: number;
	state: 'ok' | 'late' | 'lost' | 'waiting' | 'off';
	since: string | null;
	advice: { code: string; text: string; check: string } | null;
	lastGoodAt: string | null;
	tags: number;
	staleTags: number;
	requests: number;
	failures: number;
	good: number;
	bad: number;
	duplicates: number;
	dropped: number;
	reconnects: number;
	latencyP50Ms: number | null;
	latencyP95Ms: number | null;
	clockSkewMs: number | null;
	isOwned: boolean;
	/** Share of requests answered, by hour, oldest first, over the last 24 h; null where nothing was asked. */
	day: (number | null)[];
}

const LIST = `
SELECT s.id, s.name, s.kind, s.enabled, s.settings, s.contact, s.notes, s.version,
	CASE WHEN NOT s.enabled THEN 'off' ELSE coalesce(h.state, 'waiting') END AS state, h.since, h.advice, h.last_good_at,
	(SELECT count(*)::int FROM tags t WHERE t.source_id = s.id AND t.published_at IS NOT NULL AND t.retired_at IS NULL) AS tags,
	(SELECT count(*)::int FROM tags t JOIN latest l ON l.tag_id = t.id WHERE t.source_id = s.id AND t.retired_at IS NULL AND l.is_stale) AS stale,
	coalesce(h.requests, 0) AS requests, coalesce(h.failures, 0) AS failures, coalesce(h.good, 0) AS good, coalesce(h.bad, 0) AS bad,
	coalesce(h.duplicates, 0) AS duplicates, coalesce(h.dropped, 0) AS dropped, coalesce(h.reconnects, 0) AS reconnects,
	h.latency_p50_ms, h.latency_p95_ms, h.clock_skew_ms, coalesce(le.until > now(), false) AS is_owned,
	(SELECT array_agg(share ORDER BY hour) FROM (
		SELECT g.hour, (SELECT CASE WHEN sum(m.requests) > 0 THEN 1 - sum(m.failures)::float8 / sum(m.requests)
				WHEN sum(m.good + m.bad) > 0 THEN 1 - sum(m.bad)::float8 / sum(m.good + m.bad) END
			FROM source_minutes m WHERE m.source_id = s.id AND m.minute >= g.hour AND m.minute < g.hour + interval '1 hour') AS share
		FROM generate_series(date_trunc('hour', now()) - $3::int * interval '1 hour', date_trunc('hour', now()), interval '1 hour') AS g(hour)) hours) AS day
FROM sources s LEFT JOIN source_health h ON h.source_id = s.id LEFT JOIN source_leases le ON le.source_id = s.id
WHERE s.site_id = $1 AND s.deleted_at IS NULL AND ($2::uuid IS NULL OR s.id = $2::uuid)
ORDER BY s.created_at, s.name`;

const iso = (date: Date | null): string | null => date?.toISOString() ?? null;

async function listFrom(pool: Pool, siteId: number, id: string | null, hours: number): Promise<SourceOverview[]> {
	const { rows } = await pool.query(LIST, [siteId, id, hours - 1]);
	return rows.map((row) => ({
		id: row.id,
		name: row.name,
		kind: row.kind,
		enabled: row.enabled,
		settings: row.settings,
		contact: row.contact,
		notes: row.notes,
		version: row.version,
		state: row.state,
		since: iso(row.since),
		advice: row.advice,
		lastGoodAt: iso(row.last_good_at),
		tags: row.tags,
		staleTags: row.stale,
		requests: Number(row.requests),
		failures: Number(row.failures),
		good: Number(row.good),
		bad: Number(row.bad),
		duplicates: Number(row.duplicates),
		dropped: Number(row.dropped),
		reconnects: Number(row.reconnects),
		latencyP50Ms: row.latency_p50_ms,
		latencyP95Ms: row.latency_p95_ms,
		clockSkewMs: row.clock_skew_ms,
		isOwned: row.is_owned,
		day: row.day,
	}));
}

/** Every source of a site with its state and its last day. */
export async function listSourceOverviews(pool: Pool, siteId: number): Promise<SourceOverview[]> {
	return listFrom(pool, siteId, null, 24);
}

export interface SourcePage {
	source: SourceOverview;
	/** Machines that miss readings because of it. */
	missing: { machine: string; tags: number }[];
	receivers: string[];
	events: { at: string; level: 'note' | 'warning' | 'error'; code: string; text: string }[];
	exchanges: { at: string; direction: 'out' | 'in' | 'none'; bytes: string; meaning: string; failed: boolean }[];
	certificates: {
		fingerprint: string;
		subject: string;
		issuer: string;
		validFrom: string | null;
		validTo: string | null;
		state: string;
	}[];
	answered: { twoDays: number | null; ninetyDays: number | null };
}

const UUID = /^[0-9a-f]{8}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{12}$/i;

/** One source with what its page shows; null where the site has none of that id. */
export async function findSourcePage(pool: Pool, siteId: number, id: string): Promise<SourcePage | null> {
	if (!UUID.test(id)) return null;
	const [source] = await listFrom(pool, siteId, id, 48);
	if (!source) return null;
	const [missing, receivers, events, exchanges, certificates, answered] = await Promise.all([
		pool.query(
			`SELECT coalesce(t.row->>'machine', 'no machine') AS machine, count(*)::int AS tags FROM tags t JOIN latest l ON l.tag_id = t.id
			 WHERE t.source_id = $1 AND t.retired_at IS NULL AND l.is_stale GROUP BY 1 ORDER BY 2 DESC, 1 LIMIT 12`,
			[id],
		),
		pool.query(`SELECT name FROM feed_readers WHERE site_id = $1 AND read_at > now() - interval '1 day' ORDER BY name LIMIT 10`, [
			siteId,
		]),
		pool.query(`SELECT at, level, code, text FROM source_events WHERE source_id = $1 ORDER BY id DESC LIMIT 60`, [id]),
		pool.query(
			`SELECT at, direction, bytes, meaning, failed FROM source_exchanges WHERE source_id = $1 ORDER BY at DESC, id DESC LIMIT 40`,
			[id],
		),
		pool.query(
			`SELECT fingerprint, subject, issuer, valid_from, valid_to, state FROM certificates WHERE source_id = $1 ORDER BY first_seen_at DESC LIMIT 10`,
			[id],
		),
		pool.query(
			`SELECT 1 - sum(failures) FILTER (WHERE minute > now() - interval '2 days')::float8 / nullif(sum(requests) FILTER (WHERE minute > now() - interval '2 days'), 0) AS two_days,
				1 - sum(failures)::float8 / nullif(sum(requests), 0) AS ninety_days
			 FROM source_minutes WHERE source_id = $1 AND minute > now() - interval '90 days'`,
			[id],
		),
	]);
	return {
		source,
		missing: missing.rows,
		receivers: receivers.rows.map((row) => row.name),
		events: events.rows.map((row) => ({ ...row, at: row.at.toISOString() })),
		exchanges: exchanges.rows.map((row) => ({ ...row, at: row.at.toISOString() })),
		certificates: certificates.rows.map((row) => ({
			fingerprint: row.fingerprint,
			subject: row.subject,
			issuer: row.issuer,
			validFrom: iso(row.valid_from),
			validTo: iso(row.valid_to),
			state: row.state,
		})),
		answered: { twoDays: answered.rows[0]?.two_days ?? null, ninetyDays: answered.rows[0]?.ninety_days ?? null },
	};
}
