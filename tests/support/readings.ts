// Tests. Short ways to a site with tags and to readings of them.
import type { Pool } from '#lib/server/db/pool.ts';
import { EMPTY_BATCH, type StoredReading, type WriteBatch } from '#lib/pipeline/store/write-batch.ts';

/** A site with `count` published tags of unit mm/s; answers the ids. */
export async function siteWithTags(
	pool: Pool,
	count: number,
	slug = `site-${Math.random().toString(36).slice(2, 8)}`,
): Promise<{ siteId: number; tagIds: number[] }> {
	const site = await pool.query<{ id: number }>('INSERT INTO sites (slug, name) VALUES ($1, $1) RETURNING id', [slug]);
	const siteId = site.rows[0]?.id ?? 0;
	const tags = await pool.query<{ id: number }>(
		`INSERT INTO tags (site_id, name, unit, published_at) SELECT $1, 'T' || n, 'mm/s', now() FROM generate_series(1, $2::int) AS n RETURNING id`,
		[siteId, count],
	);
	return { siteId, tagIds: tags.rows.map((row) => row.id) };
}

export function storedReading(
	siteId: number,
	tagId: number,
	at: number,
	value: number | null,
	extra: Partial<StoredReading> = {},
): StoredReading {
	return {
		siteId,
		tagId,
		at,
		value,
		quality: value === null ? 0x808c0000 : 0,
		timeFrom: 'source',
		receivedAt: at,
		sourceAt: null,
		reason: null,
		raw: value,
		rawKept: null,
		wire: null,
		revision: 1,
		...extra,
	};
}

export function batchOf(readings: StoredReading[], extra: Partial<WriteBatch> = {}): WriteBatch {
	return { ...EMPTY_BATCH, readings, ...extra };
}
