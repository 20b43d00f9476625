// Edge: store. May touch: pool; readings and roll-ups, to read.
import type { Pool } from '#lib/server/db/pool.ts';
import { bucketSql, STANDS_S, STEPPED } from './roll-up-sql.ts';
import { dayOfPart, listDays, partsOfDays } from './trend-days.ts';

export interface TrendBucket {
	/** Begin of the bucket, milliseconds. */
	at: number;
	min: number | null;
	max: number | null;
	/** Weighted by time; null where nothing stood. */
	mean: number | null;
	n: number;
	/** Worst quality of the bucket. */
	worst: number;
}

/** From what a trend was drawn: readings themselves, or roll-ups of a minute or an hour. */
export type TrendLevel = 'readings' | 'minute' | 'hour';

export interface Trend {
	buckets: TrendBucket[];
	widthS: number;
	level: TrendLevel;
}

const HOUR_S = 3_600;
const DAY_S = 86_400;
/** Width in which readings are shared out to a site's days: every zone's days begin at a quarter of an hour. */
const QUARTER_S = 900;
/** Widths a bucket may have, so that what is written beside a trend is a plain span of time. */
const WIDTHS_S = [
	1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1_800, 3_600, 7_200, 14_400, 21_600, 43_200, 86_400, 172_800, 604_800,
];

/** The narrowest plain width with which a range needs at most `points` buckets. Units: milliseconds in, seconds out. */
export function bucketWidthS(rangeMs: number, points: number): number {
	const least = rangeMs / 1_000 / points;
	return WIDTHS_S.find((width) => width >= least) ?? Math.ceil(least / 604_800) * 604_800;
}

/** The coarsest roll-up whose rows a bucket of this width is made of whole. */
function levelOf(widthS: number): TrendLevel {
	return widthS >= HOUR_S ? 'hour' : widthS >= 60 ? 'minute' : 'readings';
}

/** What one bucket holds, or a piece of it. */
export interface TrendPart {
	begin_s: number;
	n: number;
	min: number | null;
	max: number | null;
	area: number;
	covered_s: number;
	worst: number;
}

/**
 * A tag's course over [from, to) in at most `points` buckets; buckets without a reading are left out, so that a gap stays a gap.
 * Wide buckets are made of roll-ups, so that a year costs about what a day does; what these do not hold yet is made of the readings.
 * Buckets of days are the site's days in `timeZone`. Only readings in the unit that stands now.
 */
export async function findTrend(
	pool: Pool,
	tagId: number,
	from: number,
	to: number,
	points: number,
	timeZone = 'UTC',
): Promise<Trend> {
	// Buckets begin at multiples of their width, so one more may be touched at the left edge.
	const widthS = bucketWidthS(to - from, Math.max(1, points - 1));
	const level = levelOf(widthS);
	if (widthS >= DAY_S && timeZone !== 'UTC')
		return findDays(pool, tagId, from, to, { points, timeZone, daysEach: widthS / DAY_S });
	const begin = floorTo(from, widthS);
	if (level === 'readings') return { widthS, level, buckets: merge([await ofReadings(pool, tagId, begin, to, widthS)]) };
	const facts = await readFacts(pool, tagId);
	const rolledUntil = Math.max(begin, floorTo(Math.min(to, facts.until), 60));
	const hourUntil = Math.max(begin, floorTo(rolledUntil, HOUR_S));
	const minuteUntil = facts.isSparse ? (level === 'hour' ? hourUntil : begin) : rolledUntil;
	const parts = await Promise.all([
		level === 'hour' ? ofHours(pool, tagId, begin, hourUntil, widthS) : [],
		ofMinutes(pool, tagId, level === 'hour' ? hourUntil : begin, minuteUntil, widthS, facts.isStepped),
		ofReadings(pool, tagId, minuteUntil, to, widthS),
	]);
	return { widthS, level, buckets: merge(parts) };
}

interface DaysAsked {
	points: number;
	timeZone: string;
	daysEach: number;
}

async function findDays(pool: Pool, tagId: number, from: number, to: number, asked: DaysAsked): Promise<Trend> {
	const [{ until }, bounds] = await Promise.all([
		readFacts(pool, tagId),
		listDays(pool, asked.timeZone, from, to, asked.daysEach),
	]);
	// A range that touches a day of 23 hours may hold one more than asked for.
	if (bounds.starts.length > asked.points)
		return findDays(pool, tagId, from, to, { ...asked, daysEach: asked.daysEach < 7 ? 7 : asked.daysEach + 7 });
	const begin = bounds.starts[0] ?? from;
	const minuteUntil = Math.max(begin, floorTo(Math.min(to, until), QUARTER_S));
	const hourUntil = Math.max(begin, floorTo(minuteUntil, HOUR_S));
	const [rolled, read] = await Promise.all([
		partsOfDays(pool, tagId, bounds, hourUntil, minuteUntil),
		ofReadings(pool, tagId, minuteUntil, to, QUARTER_S),
	]);
	const placed = read.map((part) => ({ ...part, begin_s: dayOfPart(bounds.starts, part.begin_s) }));
	return { widthS: asked.daysEach * DAY_S, level: 'hour', buckets: merge([rolled, placed]) };
}

/** A polled value that comes this rarely has about as many readings as one-minute rows, and these say nothing of the line between them. */
const SPARSE_S = 30;

interface Facts {
	/** Up to when readers go by the tag's roll-ups, ms. */
	until: number;
	/** A value stands until the next one. */
	isStepped: boolean;
	/** Joined by lines and rare: its minutes are better made of the readings. */
	isSparse: boolean;
}

async function readFacts(pool: Pool, tagId: number): Promise<Facts> {
	const found = await pool.query<{ until: Date | null; stepped: boolean; every_s: number }>(
		`SELECT p.minute_until AS until, ${STEPPED} AS stepped,
			greatest(coalesce((t.row->>'expected_every_s')::float8, 0), coalesce((t.row->>'interval_ms')::float8, 1000) / 1000) AS every_s
		 FROM tags t LEFT JOIN sources s ON s.id = t.source_id LEFT JOIN rollup_progress p ON p.site_id = t.site_id WHERE t.id = $1`,
		[tagId],
	);
	const row = found.rows[0];
	if (!row) return { until: 0, isStepped: true, isSparse: false };
	return { until: row.until?.getTime() ?? 0, isStepped: row.stepped, isSparse: !row.stepped && row.every_s >= SPARSE_S };
}

const iso = (at: number) => new Date(at).toISOString();
const floorTo = (at: number, widthS: number) => Math.floor(at / 1_000 / widthS) * widthS * 1_000;

async function ofHours(pool: Pool, tagId: number, from: number, to: number, widthS: number): Promise<TrendPart[]> {
	if (to <= from) return [];
	const found = await pool.query<TrendPart>(
		`SELECT (floor(extract(epoch FROM r.bucket)::float8 / $4) * $4)::float8 AS begin_s, sum(r.n)::int AS n, min(r.min) AS min, max(r.max) AS max,
			sum(r.area) AS area, sum(r.covered_s) AS covered_s, max(r.worst::bit(32)::bigint)::float8 AS worst
		 FROM rollups_hour r WHERE r.tag_id = $1 AND r.bucket >= $2 AND r.bucket < $3
			AND r.unit_revision = (SELECT unit_revision FROM tags WHERE id = $1)
		 GROUP BY 1`,
		[tagId, iso(from), iso(to), widthS],
	);
	return found.rows;
}

/** Minutes have a row only where a reading came; what stood between two of them counts too, within the buckets that hold them. */
async function ofMinutes(
	pool: Pool,
	tagId: number,
	from: number,
	to: number,
	widthS: number,
	isStepped: boolean,
): Promise<TrendPart[]> {
	if (to <= from) return [];
	const found = await pool.query<TrendPart>(
		`WITH minutes AS (
			SELECT r.n, r.min, r.max, r.area, r.covered_s, r.last, r.worst, extract(epoch FROM r.bucket)::float8 AS s
			FROM rollups_minute r WHERE r.tag_id = $1 AND r.bucket >= $2::timestamptz - CASE WHEN $5 THEN interval '${STANDS_S} seconds' ELSE interval '0' END AND r.bucket < $3
				AND r.unit_revision = (SELECT unit_revision FROM tags WHERE id = $1)
		), placed AS (
			SELECT *, (floor(s / $4) * $4)::float8 AS begin_s,
				lag(s + 60) OVER one AS before_s, lag(last) OVER one AS before,
				least(coalesce(lead(s) OVER one, extract(epoch FROM $3::timestamptz)::float8), (floor(s / $4) * $4)::float8 + $4) AS stands_until
			FROM minutes WINDOW one AS (ORDER BY s)
		), filled AS (
			SELECT *,
				CASE WHEN $5 AND last IS NOT NULL AND stands_until - s <= ${STANDS_S} THEN greatest(0, stands_until - s - 60) ELSE 0 END AS ahead_s,
				CASE WHEN $5 AND before IS NOT NULL AND before_s <= begin_s AND s - before_s <= ${STANDS_S} THEN s - begin_s ELSE 0 END AS behind_s
			FROM placed
		)
		SELECT begin_s, sum(n)::int AS n, min(min) AS min, max(max) AS max,
			sum(area + coalesce(last * ahead_s, 0) + coalesce(before * behind_s, 0)) AS area,
			sum(covered_s + ahead_s + behind_s) AS covered_s, max(worst::bit(32)::bigint)::float8 AS worst
		FROM filled WHERE s >= extract(epoch FROM $2::timestamptz)::float8 GROUP BY begin_s`,
		[tagId, iso(from), iso(to), widthS, isStepped],
	);
	return found.rows;
}

async function ofReadings(pool: Pool, tagId: number, from: number, to: number, widthS: number): Promise<TrendPart[]> {
	if (to <= from) return [];
	const found = await pool.query<TrendPart>(
		`SELECT begin_s, n, min, max, area, covered_s, worst::float8 AS worst
		 FROM (${bucketSql('SELECT $1::int AS tag_id, $2::timestamptz AS a, $3::timestamptz AS b', '$4::float8')}) AS made`,
		[tagId, iso(from), iso(to), widthS],
	);
	return found.rows;
}

/** One bucket a begin, in order; a bucket at the edge may be made of hours, minutes and readings together. */
function merge(lists: readonly TrendPart[][]): TrendBucket[] {
	const byBegin = new Map<number, TrendPart>();
	for (const part of lists.flat()) {
		const known = byBegin.get(part.begin_s);
		if (!known) {
			byBegin.set(part.begin_s, { ...part });
			continue;
		}
		known.n += part.n;
		known.min = known.min === null ? part.min : part.min === null ? known.min : Math.min(known.min, part.min);
		known.max = known.max === null ? part.max : part.max === null ? known.max : Math.max(known.max, part.max);
		known.area += part.area;
		known.covered_s += part.covered_s;
		known.worst = Math.max(known.worst, part.worst);
	}
	return [...byBegin.values()]
		.sort((a, b) => a.begin_s - b.begin_s)
		.map((part) => ({
			at: part.begin_s * 1_000,
			min: part.min,
			max: part.max,
			mean: meanOf(part),
			n: part.n,
			worst: part.worst >>> 0,
		}));
}

function meanOf(part: TrendPart): number | null {
	if (part.covered_s > 0) return part.area / part.covered_s;
	// A single value at the very end of a bucket stood for no time in it.
	return part.min === null || part.max === null ? null : (part.min + part.max) / 2;
}
