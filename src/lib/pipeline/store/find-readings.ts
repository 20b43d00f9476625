// Edge: store. May touch: pool; readings, to read.
import type { Pool } from '#lib/server/db/pool.ts';

export interface ReadingRow {
	at: number;
	value: number | null;
	quality: number;
	isHubTime: boolean;
	reason: string | null;
	revision: number;
	receivedAt: number;
	sourceAt: number | null;
	raw: string | null;
}

export interface ReadingsQuery {
	/** Half-open range [from, to), milliseconds; null for open. */
	from: number | null;
	to: number | null;
	order: 'oldest' | 'newest';
	limit: number;
	/** Key of the last row of the page before. */
	after: ReadingKey | null;
}

/** A reading's place among its tag's: equal keys are the same reading. */
export interface ReadingKey {
	at: number;
	value: number | null;
	quality: number;
}

const iso = (at: number) => new Date(at).toISOString();
const HOUR_MS = 3_600_000;

interface FoundRow {
	at: Date | null;
	value: number | null;
	quality: number;
	is_hub_time: boolean;
	reason: string | null;
	revision: number;
	received_at: Date;
	source_at: Date | null;
	raw: string | null;
	edge: Date | null;
}

/**
 * Stored readings of one tag in the unit that stands now: rows of revisions before the unit's last change are left out, since no answer spans two units.
 */
export async function findReadings(pool: Pool, tagId: number, query: ReadingsQuery): Promise<ReadingRow[]> {
	const rows: ReadingRow[] = [];
	let rest = query;
	for (;;) {
		const { found, edge } = await findPart(pool, tagId, { ...rest, limit: query.limit - rows.length });
		rows.push(...found);
		// Blocks that hold fewer readings in this unit than they have in all leave a part short; the next begins where it ended.
		if (edge === null || rows.length >= query.limit) return rows;
		rest = query.order === 'oldest' ? { ...rest, from: edge + HOUR_MS } : { ...rest, to: edge };
	}
}

/**
 * Rows and as many blocks as the limit needs, in one statement, so that a day that is packed meanwhile is seen once. `edge` is the hour of the last
 * block that was opened where there are more: what lies behind it is not in the answer.
 */
async function findPart(pool: Pool, tagId: number, query: ReadingsQuery): Promise<{ found: ReadingRow[]; edge: number | null }> {
	const isOldest = query.order === 'oldest';
	const [down, past, furthest] = isOldest ? ['', '>', 'min'] : ['DESC', '<', 'max'];
	const columns = 'at, value, quality, is_hub_time, reason, revision, received_at, source_at, raw';
	// A missing value sorts as the largest, so that paging has one order.
	const order = `at ${down}, coalesce(value, 'Infinity'::float8) ${down}, quality ${down}`;
	const wanted = `tag_id = $1 AND revision >= (SELECT unit_revision FROM tags WHERE id = $1)
		AND ($2::timestamptz IS NULL OR at >= $2) AND ($3::timestamptz IS NULL OR at < $3)
		AND ($4::timestamptz IS NULL OR (at ${past}= $4 AND (at, coalesce(value, 'Infinity'::float8), quality) ${past} ($4, coalesce($5::float8, 'Infinity'::float8), $6::int)))`;
	const hours = `tag_id = $1 AND ($8::timestamptz IS NULL OR hour >= $8) AND ($9::timestamptz IS NULL OR hour < $9)`;
	const first = isOldest && query.after ? Math.max(query.after.at, query.from ?? -Infinity) : query.from;
	const last = !isOldest && query.after ? Math.min(query.after.at + 1, query.to ?? Infinity) : query.to;
	// The first block is not counted: it may lie mostly before the begin.
	const answer = await pool.query<FoundRow>(
		`WITH counted AS MATERIALIZED (
			SELECT hour, sum(n) OVER w - first_value(n) OVER w AS filled FROM (
				SELECT hour, n FROM reading_blocks WHERE ${hours} AND last_revision >= (SELECT unit_revision FROM tags WHERE id = $1)
					AND hour < (SELECT packed_until FROM packing_state) ORDER BY hour ${down} LIMIT $7::int + 1) blocks
			WINDOW w AS (ORDER BY hour ${down})
		), edge AS MATERIALIZED (
			SELECT ${furthest}(hour) AS hour FROM counted WHERE filled >= $7
		), page AS (
			SELECT ${columns} FROM (
				(SELECT ${columns} FROM recent_readings WHERE ${wanted} ORDER BY ${order} LIMIT $7)
				UNION ALL (SELECT ${columns} FROM late_readings WHERE ${wanted} ORDER BY ${order} LIMIT $7)
				UNION ALL (SELECT ${columns} FROM unpacked_readings WHERE ${wanted} AND ${hours}
					AND hour >= (SELECT min(hour) FROM counted) AND hour <= (SELECT max(hour) FROM counted)
					AND hour ${isOldest ? '<=' : '>='} coalesce((SELECT hour FROM edge), '${isOldest ? '' : '-'}infinity') ORDER BY ${order} LIMIT $7)) parts
			WHERE ${isOldest ? "at < coalesce((SELECT hour FROM edge) + interval '1 hour', 'infinity')" : "at >= coalesce((SELECT hour FROM edge), '-infinity')"}
			ORDER BY ${order} LIMIT $7
		)
		SELECT edge.hour AS edge, page.* FROM edge LEFT JOIN page ON true ORDER BY ${order}`,
		[
			tagId,
			query.from === null ? null : iso(query.from),
			query.to === null ? null : iso(query.to),
			query.after ? iso(query.after.at) : null,
			query.after?.value ?? null,
			(query.after?.quality ?? 0) | 0,
			query.limit,
			first === null ? null : iso(Math.floor(first / HOUR_MS) * HOUR_MS),
			last === null ? null : iso(last),
		],
	);
	return {
		found: answer.rows.flatMap((row) => (row.at === null ? [] : [readingOf(row, row.at)])),
		edge: answer.rows[0]?.edge?.getTime() ?? null,
	};
}

function readingOf(row: FoundRow, at: Date): ReadingRow {
	return {
		at: at.getTime(),
		value: row.value,
		quality: row.quality >>> 0,
		isHubTime: row.is_hub_time,
		reason: row.reason,
		revision: row.revision,
		receivedAt: row.received_at.getTime(),
		sourceAt: row.source_at?.getTime() ?? null,
		raw: row.raw,
	};
}
