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

/**
 * Stored readings of one tag in the unit that stands now: rows of revisions before the unit's last change are left out, since no answer spans two units.
 */
export async function findReadings(pool: Pool, tagId: number, query: ReadingsQuery): Promise<ReadingRow[]> {
	const isOldest = query.order === 'oldest';
	// A missing value sorts as the largest, so that paging has one order.
	const found = await pool.query<{
		at: Date;
		value: number | null;
		quality: number;
		is_hub_time: boolean;
		reason: string | null;
		revision: number;
		received_at: Date;
		source_at: Date | null;
		raw: string | null;
	}>(
		`SELECT r.at, r.value, r.quality, r.is_hub_time, r.reason, r.revision, r.received_at, r.source_at, r.raw FROM readings r JOIN tags t ON t.id = r.tag_id
		 WHERE r.tag_id = $1 AND r.revision >= t.unit_revision
		   AND ($2::timestamptz IS NULL OR r.at >= $2) AND ($3::timestamptz IS NULL OR r.at < $3)
		   AND ($4::timestamptz IS NULL OR (${isOldest ? 'r.at >= $4' : 'r.at <= $4'}
				AND (r.at, coalesce(r.value, 'Infinity'::float8), r.quality) ${isOldest ? '>' : '<'} ($4, coalesce($5::float8, 'Infinity'::float8), $6::int)))
		 ORDER BY r.at ${isOldest ? '' : 'DESC'}, coalesce(r.value, 'Infinity'::float8) ${isOldest ? '' : 'DESC'}, r.quality ${isOldest ? '' : 'DESC'} LIMIT $7`,
		[
			tagId,
			query.from === null ? null : iso(query.from),
			query.to === null ? null : iso(query.to),
			query.after ? iso(query.after.at) : null,
			query.after?.value ?? null,
			(query.after?.quality ?? 0) | 0,
			query.limit,
		],
	);
	return found.rows.map((row) => ({
		at: row.at.getTime(),
		value: row.value,
		quality: row.quality >>> 0,
		isHubTime: row.is_hub_time,
		reason: row.reason,
		revision: row.revision,
		receivedAt: row.received_at.getTime(),
		sourceAt: row.source_at?.getTime() ?? null,
		raw: row.raw,
	}));
}
