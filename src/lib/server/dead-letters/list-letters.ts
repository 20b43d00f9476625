// Edge: dead letters. May touch: dead-letter and tag tables, select only.
import { z } from 'zod';
import { encodeCursor } from '#lib/server/http/cursor.ts';
import type { Pool } from '#lib/server/db/pool.ts';

/** A reading that could not be stored, as the API says it. */
export const letterJson = z.object({
	id: z.int(),
	/** When it was set aside. */
	set_aside_at: z.iso.datetime(),
	reason: z.string(),
	tag: z.string().nullable(),
	at: z.iso.datetime().nullable(),
	value: z.number().nullable(),
	quality: z.int(),
	unit: z.string().nullable(),
});
export type LetterJson = z.input<typeof letterJson>;

export const reasonJson = z.object({
	reason: z.string(),
	count: z.int(),
	first_at: z.iso.datetime(),
	last_at: z.iso.datetime(),
});

interface LetterRow {
	id: number;
	at: Date;
	reason: string;
	tag: string | null;
	unit: string | null;
	reading_at: number | null;
	value: number | null;
	quality: number | null;
}

/** Letters of a site that wait, newest first; `after` is the cursor of the page before. */
export async function listLetters(
	pool: Pool,
	query: { siteId: number; reason?: string | undefined; after?: number | undefined; limit: number },
): Promise<{ items: LetterJson[]; next: string | null }> {
	const found = await pool.query<LetterRow>(
		`SELECT d.id, d.at, d.reason, t.name AS tag, t.unit,
			CASE WHEN jsonb_typeof(d.row->'at') = 'number' THEN (d.row->>'at')::float8 END AS reading_at,
			CASE WHEN jsonb_typeof(d.row->'value') = 'number' THEN (d.row->>'value')::float8 END AS value,
			CASE WHEN jsonb_typeof(d.row->'quality') = 'number' THEN (d.row->>'quality')::float8 END AS quality
		 FROM dead_letters d LEFT JOIN tags t ON t.id = d.tag_id AND t.site_id = d.site_id
		 WHERE d.site_id = $1 AND d.resolved_at IS NULL AND ($2::text IS NULL OR d.reason = $2) AND ($3::bigint IS NULL OR d.id < $3)
		 ORDER BY d.id DESC LIMIT $4`,
		[query.siteId, query.reason ?? null, query.after ?? null, query.limit + 1],
	);
	const page = found.rows.slice(0, query.limit);
	const last = page.at(-1);
	return { items: page.map(jsonOf), next: found.rows.length > query.limit && last ? encodeCursor([last.id]) : null };
}

function jsonOf(row: LetterRow): LetterJson {
	const isTime = row.reading_at !== null && Math.abs(row.reading_at) < 253_402_300_800_000;
	return {
		id: row.id,
		set_aside_at: row.at.toISOString(),
		reason: row.reason,
		tag: row.tag,
		at: isTime && row.reading_at !== null ? new Date(row.reading_at).toISOString() : null,
		value: row.value,
		quality: (row.quality ?? 0) >>> 0,
		unit: row.unit,
	};
}

/** How many letters of a site wait, by reason, the most first. */
export async function countLetters(pool: Pool, siteId: number): Promise<z.input<typeof reasonJson>[]> {
	const found = await pool.query<{ reason: string; count: number; first_at: Date; last_at: Date }>(
		`SELECT reason, count(*) AS count, min(at) AS first_at, max(at) AS last_at FROM dead_letters
		 WHERE site_id = $1 AND resolved_at IS NULL GROUP BY reason ORDER BY count(*) DESC, reason`,
		[siteId],
	);
	return found.rows.map((row) => ({ ...row, first_at: row.first_at.toISOString(), last_at: row.last_at.toISOString() }));
}
