// Edge: store. May touch: pool; readings and alarms, to read.
import type { Pool } from '#lib/server/db/pool.ts';
import type { Baseline } from '#lib/domain/propose-limits.ts';

const iso = (at: number) => new Date(at).toISOString();

/**
 * Mean and spread of a tag's good readings in [from, to), in the unit that stands now and outside its alarms: what a machine in trouble showed
 * is no baseline. Null where there is none. A StatusCode is good below 0x40000000 [OPC 10000-4 §7.39].
 */
export async function findBaseline(pool: Pool, tagId: number, from: number, to: number): Promise<Baseline | null> {
	const found = await pool.query<{ n: number; mean: number; sigma: number | null; first: Date; last: Date }>(
		`SELECT count(*)::int AS n, avg(r.value) AS mean, stddev_samp(r.value) AS sigma, min(r.at) AS first, max(r.at) AS last
		 FROM reading_history r JOIN tags t ON t.id = r.tag_id
		 WHERE r.tag_id = $1 AND r.at >= $2 AND r.at < $3 AND r.hour >= date_trunc('hour', $2::timestamptz, 'UTC') AND r.hour < $3
		   AND r.value IS NOT NULL AND r.quality >= 0 AND r.quality < 1073741824 AND r.revision >= t.unit_revision
		   AND NOT EXISTS (SELECT 1 FROM alarms a WHERE a.tag_id = $1 AND NOT a.is_test AND a.direction <> 'stale'
				AND r.at >= a.raised_at AND r.at < coalesce(a.cleared_at, 'infinity'))`,
		[tagId, iso(from), iso(to)],
	);
	const row = found.rows[0];
	if (!row || row.n === 0) return null;
	return { n: row.n, mean: row.mean, sigma: row.sigma ?? 0, from: row.first.getTime(), to: row.last.getTime() };
}
