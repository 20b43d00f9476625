// Edge: store. May touch: pool; readings, to read.
import type { Pool } from '#lib/server/db/pool.ts';

export interface TrendBucket {
	/** Begin of the bucket, milliseconds. */
	at: number;
	min: number | null;
	max: number | null;
	/** Weighted by time: each value counts until the next reading or the bucket's end. Null where there is none. */
	mean: number | null;
	n: number;
	/** Worst quality of the bucket. */
	worst: number;
}

/** Widths a bucket may have, so that what is written beside a trend is a plain span of time. */
const WIDTHS_S = [
	1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1_800, 3_600, 7_200, 14_400, 21_600, 43_200, 86_400, 172_800, 604_800,
];

/** The narrowest plain width with which a range needs at most `points` buckets. Units: milliseconds in, seconds out. */
export function bucketWidthS(rangeMs: number, points: number): number {
	const least = rangeMs / 1_000 / points;
	return WIDTHS_S.find((width) => width >= least) ?? Math.ceil(least / 604_800) * 604_800;
}

/**
 * A tag's course over [from, to) in at most `points` buckets; buckets without a reading are left out, so that a gap stays a gap.
 * Only readings in the unit that stands now.
 */
export async function findTrend(
	pool: Pool,
	tagId: number,
	from: number,
	to: number,
	points: number,
): Promise<{ buckets: TrendBucket[]; widthS: number }> {
	// Buckets begin at multiples of their width, so one more may be touched at the left edge.
	const widthS = bucketWidthS(to - from, Math.max(1, points - 1));
	const found = await pool.query<{
		at: number;
		min: number | null;
		max: number | null;
		mean: number | null;
		n: number;
		worst: string;
	}>(
		`WITH spans AS (
			SELECT floor(extract(epoch FROM r.at) / $4)::bigint AS bucket, r.value, r.quality, extract(epoch FROM r.at) AS s,
				extract(epoch FROM lead(r.at) OVER (ORDER BY r.at)) AS next_s
			FROM reading_history r JOIN tags t ON t.id = r.tag_id
			WHERE r.tag_id = $1 AND r.at >= $2 AND r.at < $3 AND r.hour >= date_trunc('hour', $2::timestamptz, 'UTC') AND r.hour < $3 AND r.revision >= t.unit_revision)
		 SELECT (bucket * $4 * 1000)::float8 AS at, min(value) AS min, max(value) AS max, count(value)::int AS n,
			CASE WHEN count(value) = 0 THEN NULL
				ELSE coalesce(sum(value * w) / nullif(sum(w) FILTER (WHERE value IS NOT NULL), 0), avg(value)) END AS mean,
			max(quality::bit(32)::bigint)::text AS worst
		 FROM (SELECT *, greatest(0, least(coalesce(next_s, (bucket + 1) * $4), (bucket + 1) * $4) - s)::float8 AS w FROM spans) weighed
		 GROUP BY bucket ORDER BY bucket`,
		[tagId, new Date(from).toISOString(), new Date(to).toISOString(), widthS],
	);
	return { widthS, buckets: found.rows.map((row) => ({ ...row, worst: Number(row.worst) >>> 0 })) };
}
