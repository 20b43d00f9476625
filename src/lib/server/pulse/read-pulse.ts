// Edge: pulse. May touch: web pool, select only.
import type { Pool } from '#lib/server/db/pool.ts';

/** One beat of a site: what the bar at the foot of every page says. Counts are of now; `taken` is the running sum of readings taken. */
export interface PulseRow {
	at: number;
	taken: number;
	sources_up: number;
	sources_total: number;
	tags: number;
	tags_stale: number;
	danger: number;
	alert: number;
	unacknowledged: number;
	slowest_lag_s: number | null;
	slowest_reader: string | null;
	collector_alive: boolean;
	/** Readings that collectors keep on disk until the database has taken them, all sites together; and how long the oldest has waited. */
	spooled: number;
	spooled_for_s: number;
	change: string;
}

const PULSE = `
WITH source_figures AS (
	SELECT coalesce(sum(h.good + h.bad), 0)::float8 AS taken,
		count(*) FILTER (WHERE h.state IN ('ok', 'late'))::int AS up,
		count(*)::int AS total,
		coalesce(string_agg(h.state, ',' ORDER BY s.name), '') AS states
	FROM sources s LEFT JOIN source_health h ON h.source_id = s.id
	WHERE s.site_id = $1 AND s.deleted_at IS NULL AND s.enabled
), tag_figures AS (
	SELECT count(*)::int AS tags, count(*) FILTER (WHERE l.is_stale)::int AS stale
	FROM tags t LEFT JOIN latest l ON l.tag_id = t.id
	WHERE t.site_id = $1 AND t.published_at IS NOT NULL AND t.retired_at IS NULL
		AND coalesce((t.row->>'enabled')::boolean, true)
), alarm_figures AS (
	SELECT count(*) FILTER (WHERE a.cleared_at IS NULL AND a.level_now = 'danger')::int AS danger,
		count(*) FILTER (WHERE a.cleared_at IS NULL AND a.level_now IS DISTINCT FROM 'danger')::int AS alert,
		count(*) FILTER (WHERE a.acknowledged_at IS NULL)::int AS unacknowledged,
		coalesce(max(a.id), 0) || ':' || coalesce(max(greatest(a.raised_at, a.escalated_at, a.acknowledged_at)), 'epoch')::text AS change
	FROM alarms a LEFT JOIN tag_states ts ON ts.tag_id = a.tag_id
	WHERE a.site_id = $1 AND (a.cleared_at IS NULL OR a.acknowledged_at IS NULL)
		AND NOT a.is_late
		AND coalesce(ts.shelved_until < now(), true) AND coalesce(ts.out_of_service_until < now(), true)
		AND (ts.suppressed_by IS NULL OR a.kind <> 'stale')
), collector_figures AS (
	SELECT coalesce(sum((stats->>'spool_readings')::float8), 0)::float8 AS spooled, coalesce(max((stats->>'spool_oldest_age_s')::float8), 0)::float8 AS spooled_for_s
	FROM collectors WHERE heartbeat_at > now() - interval '1 hour'
), readers AS (
	SELECT r.name, CASE WHEN r.position >= f.position THEN 0 ELSE
		extract(epoch FROM now() - coalesce((SELECT min(j.committed_at) FROM feed_journal j
			WHERE j.site_id = $1 AND j.last_position > r.position AND j.committed_on >= current_date - 1), now())) END::float8 AS lag
	FROM feed_readers r JOIN feed_heads f ON f.site_id = r.site_id
	WHERE r.site_id = $1 AND r.read_at > now() - interval '1 hour'
	ORDER BY lag DESC LIMIT 1
)
SELECT extract(epoch FROM clock_timestamp()) * 1000 AS at, sf.taken, sf.up AS sources_up, sf.total AS sources_total,
	tf.tags, tf.stale AS tags_stale, af.danger, af.alert, af.unacknowledged,
	(SELECT greatest(lag, 0) FROM readers) AS slowest_lag_s, (SELECT name FROM readers) AS slowest_reader,
	EXISTS (SELECT FROM collectors WHERE heartbeat_at > now() - interval '10 seconds') AS collector_alive,
	cf.spooled, cf.spooled_for_s,
	af.change || '|' || sf.states || '|' || tf.stale || '|' || tf.tags || '|' || af.danger || '|' || af.alert AS change
FROM source_figures sf, tag_figures tf, alarm_figures af, collector_figures cf`;

/** Reads one beat in one statement. */
export async function readPulse(pool: Pool, siteId: number): Promise<PulseRow> {
	const { rows } = await pool.query<PulseRow & { at: string }>(PULSE, [siteId]);
	const row = rows[0];
	if (!row) throw new Error('the pulse query answered no row');
	return { ...row, at: Math.round(Number(row.at)) };
}
