// Edge: store. May touch: pool; roll-ups, retention, to read.
import type { Pool } from '#lib/server/db/pool.ts';
import { readRetention } from './retention.ts';
import type { TrendPart } from './find-trend.ts';

/** A Monday, from which spans of several days are counted. */
const FIRST_DAY = '1970-01-05';

/** Where a site's days begin, and which UTC hours one of these bounds cuts. */
export interface DayBounds {
	/** Begins of spans of days in the site's time zone, ms, the first at or before the range. */
	starts: number[];
	/** Begins of hours that a bound divides (zones with quarter hours exist), ms: only one-minute rows can be shared out. */
	cutHours: number[];
}

const iso = (at: number) => new Date(at).toISOString();
const HOUR_MS = 3_600_000;

/**
 * Begins of a site's days over [from, to), `daysEach` days a span, weeks from Monday. A day has 23 to 25 hours where clocks change.
 * An hour older than one-minute rows are kept counts whole for the day in which it begins.
 */
export async function listDays(pool: Pool, timeZone: string, from: number, to: number, daysEach: number): Promise<DayBounds> {
	const { minuteDays } = await readRetention(pool);
	const found = await pool.query<{ start_s: number; is_kept: boolean }>(
		`WITH ends AS (
			SELECT floor((($2::timestamptz AT TIME ZONE $1)::date - date '${FIRST_DAY}') / $4::float8)::int AS first,
				floor((($3::timestamptz AT TIME ZONE $1)::date - date '${FIRST_DAY}') / $4::float8)::int AS last
		), days AS (
			SELECT (date '${FIRST_DAY}' + n * $4::int)::timestamp AT TIME ZONE $1 AS start FROM ends, generate_series(first, last) AS n
		)
		SELECT extract(epoch FROM start)::float8 AS start_s, start > now() - make_interval(days => $5) AS is_kept
		FROM days WHERE start < $3 ORDER BY start`,
		[timeZone, iso(from), iso(to), daysEach, minuteDays],
	);
	return {
		starts: found.rows.map((row) => row.start_s * 1_000),
		cutHours: found.rows
			.filter((row) => row.is_kept && (row.start_s * 1_000) % HOUR_MS !== 0)
			.map((row) => Math.floor((row.start_s * 1_000) / HOUR_MS) * HOUR_MS),
	};
}

const SUMS = `sum(r.n)::int AS n, min(r.min) AS min, max(r.max) AS max, sum(r.area) AS area, sum(r.covered_s) AS covered_s,
	max(r.worst::bit(32)::bigint)::float8 AS worst`;
const UNIT_THAT_STANDS = 'r.unit_revision = (SELECT unit_revision FROM tags WHERE id = $1)';

/** Parts of spans of days out of hours up to `hourUntil`, hours that a bound cuts out of their minutes, and minutes from there up to `minuteUntil`. */
export async function partsOfDays(
	pool: Pool,
	tagId: number,
	{ starts, cutHours }: DayBounds,
	hourUntil: number,
	minuteUntil: number,
): Promise<TrendPart[]> {
	const from = starts[0];
	if (from === undefined) return [];
	type Row = Omit<TrendPart, 'begin_s'> & { place: number };
	const bounds = starts.map(iso);
	// The first bound may cut its hour, whose later part belongs to the first day.
	const hourFrom = Math.ceil(from / HOUR_MS) * HOUR_MS;
	const cut = cutHours.filter((hour) => hour < hourUntil).map(iso);
	const found = await Promise.all([
		pool.query<Row>(
			`SELECT width_bucket(r.bucket, $4::timestamptz[]) AS place, ${SUMS} FROM rollups_hour r
			 WHERE r.tag_id = $1 AND r.bucket >= $2 AND r.bucket < $3 AND r.bucket <> ALL($5::timestamptz[]) AND ${UNIT_THAT_STANDS} GROUP BY 1`,
			[tagId, iso(hourFrom), iso(hourUntil), bounds, cut],
		),
		pool.query<Row>(
			`SELECT width_bucket(r.bucket, $2::timestamptz[]) AS place, ${SUMS}
			 FROM unnest($3::timestamptz[]) AS c(hour) JOIN rollups_minute r ON r.bucket >= c.hour AND r.bucket < c.hour + interval '1 hour'
			 WHERE r.tag_id = $1 AND r.bucket >= $4 AND r.bucket < $5 AND ${UNIT_THAT_STANDS} GROUP BY 1`,
			[tagId, bounds, cut, iso(from), iso(minuteUntil)],
		),
		pool.query<Row>(
			`SELECT width_bucket(r.bucket, $4::timestamptz[]) AS place, ${SUMS} FROM rollups_minute r
			 WHERE r.tag_id = $1 AND r.bucket >= $2 AND r.bucket < $3 AND ${UNIT_THAT_STANDS} GROUP BY 1`,
			[tagId, iso(hourUntil), iso(minuteUntil), bounds],
		),
	]);
	return found.flatMap(({ rows }) =>
		rows.flatMap(({ place, ...part }) => {
			const start = starts[place - 1];
			return start === undefined ? [] : [{ ...part, begin_s: start / 1_000 }];
		}),
	);
}

/** The begin of the span that holds a time. Both in seconds. */
export function dayOfPart(starts: readonly number[], atS: number): number {
	const start = starts.findLast((one) => one <= atS * 1_000);
	return (start ?? atS * 1_000) / 1_000;
}
