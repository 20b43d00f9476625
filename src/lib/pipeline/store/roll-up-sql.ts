// Edge: store. May touch: nothing; texts of statements over readings. Tested against aggregate/roll-up.ts.

/** Readings further apart are not joined; with STANDS_MS in aggregate/roll-up.ts. */
const STANDS = "interval '2 hours'";
export const STANDS_S = 7_200;

/** Bounds of a stretch given twice, so that packed hours are read only where they are needed. */
const within = (from: string, to: string) =>
	`r.at >= ${from} AND r.at < ${to} AND r.hour >= date_trunc('hour', ${from}, 'UTC') AND r.hour < ${to}`;

/** A tag's value stands until the next one where its source reports changes, or a deadband holds readings back; else a line joins them. */
export const STEPPED = `coalesce(s.kind <> 'modbus' OR t.row->>'deadband' IS NOT NULL OR t.quantity IS NOT DISTINCT FROM 'state' OR t.row->>'data_type' IS NOT DISTINCT FROM 'bool', true)`;

/**
 * One row a tag and bucket with a reading in it, over stretches given as rows (tag_id, a, b) of `stretches`. A bucket that a bound cuts covers
 * what lies within it. Only readings in the unit that stands now. `widthS` is SQL for the bucket's width in seconds.
 */
export function bucketSql(stretches: string, widthS: string): string {
	return `WITH wanted AS (
		SELECT g.tag_id, g.a, g.b, date_bin(make_interval(secs => ${widthS}), g.a, timestamptz '1970-01-01 00:00:00+00') AS base, t.unit_revision, ${STEPPED} AS stepped
		FROM (${stretches}) AS g JOIN tags t ON t.id = g.tag_id LEFT JOIN sources s ON s.id = t.source_id
	), points AS ( -- seconds are counted from a bound near by: a float8 since the epoch keeps only a tenth of a microsecond
		SELECT w.tag_id, w.a, w.b, w.base, w.stepped, w.unit_revision, p.at, p.value, p.quality FROM wanted w CROSS JOIN LATERAL (
			SELECT r.at, r.value, r.quality FROM reading_history r
			WHERE r.tag_id = w.tag_id AND r.revision >= w.unit_revision AND ${within('w.a', 'w.b')}
			UNION ALL
			(SELECT r.at, r.value, r.quality FROM reading_history r
			WHERE r.tag_id = w.tag_id AND r.revision >= w.unit_revision AND ${within(`(w.a - ${STANDS})`, 'w.a')}
			ORDER BY r.at DESC, r.value DESC NULLS FIRST, r.quality DESC LIMIT 1)
			UNION ALL
			(SELECT r.at, r.value, r.quality FROM reading_history r
			WHERE r.tag_id = w.tag_id AND r.revision >= w.unit_revision AND ${within('w.b', `(w.b + ${STANDS})`)}
			ORDER BY r.at, r.value NULLS LAST, r.quality LIMIT 1)
		) AS p
	), neighbours AS (
		SELECT *, lag(value) OVER one AS before_value, lead(value) OVER one AS after_value,
			extract(epoch FROM at - base)::float8 AS s,
			extract(epoch FROM lag(at) OVER one - base)::float8 AS before_s,
			extract(epoch FROM lead(at) OVER one - base)::float8 AS after_s
		FROM points WINDOW one AS (PARTITION BY tag_id, a ORDER BY at, value NULLS LAST, quality)
	), placed AS (
		SELECT *, floor(s / ${widthS}) * ${widthS} AS begin_s,
			greatest(floor(s / ${widthS}) * ${widthS}, extract(epoch FROM a - base)::float8) AS low_s,
			least(floor(s / ${widthS}) * ${widthS} + ${widthS}, extract(epoch FROM b - base)::float8) AS high_s,
			after_s IS NOT NULL AND after_s - s <= ${STANDS_S} AS has_after,
			before_s IS NOT NULL AND s - before_s <= ${STANDS_S} AND before_value IS NOT NULL AS has_before
		FROM neighbours WHERE at >= a AND at < b
	), timed AS (
		SELECT *,
			CASE WHEN value IS NULL THEN 0 ELSE greatest(0, least(CASE WHEN has_after THEN after_s ELSE 'Infinity' END, high_s) - s) END AS ahead_s,
			CASE WHEN has_before AND before_s < low_s THEN s - low_s ELSE 0 END AS behind_s
		FROM placed
	)
	SELECT tag_id, unit_revision, extract(epoch FROM base)::float8 + begin_s AS begin_s, count(*)::int AS n,
		(count(*) FILTER (WHERE value IS NOT NULL AND quality >= 0 AND quality < 1073741824))::int AS good_n,
		min(value) AS min, max(value) AS max,
		sum(CASE WHEN value IS NULL OR ahead_s = 0 THEN 0
				WHEN stepped OR NOT has_after OR after_value IS NULL THEN value * ahead_s
				ELSE ahead_s * (value + (after_value - value) * ahead_s / (2 * (after_s - s))) END
			+ CASE WHEN behind_s = 0 THEN 0
				WHEN stepped OR value IS NULL THEN before_value * behind_s
				ELSE behind_s * (value - (value - before_value) * behind_s / (2 * (s - before_s))) END) AS area,
		sum(ahead_s + behind_s) AS covered_s,
		(array_agg(value ORDER BY at DESC, value DESC NULLS FIRST, quality DESC))[1] AS last,
		max(quality::bit(32)::bigint) AS worst
	FROM timed GROUP BY tag_id, unit_revision, base, begin_s`;
}

/** A StatusCode as the signed int4 that columns hold. */
const SIGNED_WORST = 'CASE WHEN worst > 2147483647 THEN worst - 4294967296 ELSE worst END';

/** Writes the roll-ups of stretches; a row that was there is replaced. Parameters: $1 tag ids, $2 begins, $3 ends, on bounds of the width. */
export function rollUpStatement(table: 'rollups_minute' | 'rollups_hour'): string {
	const widthS = table === 'rollups_minute' ? '60' : '3600';
	return `INSERT INTO ${table} AS old (tag_id, unit_revision, bucket, n, good_n, min, max, area, covered_s, last, worst)
	SELECT tag_id, unit_revision, to_timestamp(begin_s), n, good_n, min, max, area, covered_s, last, ${SIGNED_WORST}
	FROM (${bucketSql('SELECT * FROM unnest($1::int[], $2::timestamptz[], $3::timestamptz[]) AS u(tag_id, a, b)', widthS)}) AS made
	ON CONFLICT (tag_id, bucket, unit_revision) DO UPDATE SET n = excluded.n, good_n = excluded.good_n, min = excluded.min, max = excluded.max,
		area = excluded.area, covered_s = excluded.covered_s, last = excluded.last, worst = excluded.worst`;
}

/** Widens touched stretches to the readings beside them, whose part of a bucket changes with them. Parameters: $1 tag ids, $2 first, $3 last touched. */
export const WIDEN_STATEMENT = `SELECT g.tag_id,
		(extract(epoch FROM coalesce(p.at, g.first)) * 1000)::float8 AS first, (extract(epoch FROM coalesce(n.at, g.last)) * 1000)::float8 AS last
	FROM unnest($1::int[], $2::timestamptz[], $3::timestamptz[]) AS g(tag_id, first, last)
	LEFT JOIN LATERAL (SELECT r.at FROM reading_history r WHERE r.tag_id = g.tag_id AND ${within(`(g.first - ${STANDS})`, 'g.first')} ORDER BY r.at DESC LIMIT 1) p ON true
	LEFT JOIN LATERAL (SELECT r.at FROM reading_history r WHERE r.tag_id = g.tag_id AND r.at > g.last AND ${within('g.last', `(g.last + ${STANDS})`)} ORDER BY r.at LIMIT 1) n ON true`;
