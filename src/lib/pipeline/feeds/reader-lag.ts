// Edge: feeds. May touch: the feed readers' table.
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';

/** How often one reader's place is written. */
const EVERY_MS = 2_000;
const lastWritten = new Map<string, number>();

/** Remembers how far a reader has come, at most every two seconds, for 'who reads it and how far behind'. Never fails the reader. */
export function noteReader(pool: Pool, reader: { id: string; name: string; siteId: number; position: number }): void {
	const key = `${reader.siteId}:${reader.id}`;
	const now = performance.now();
	if (now - (lastWritten.get(key) ?? -Infinity) < EVERY_MS) return;
	lastWritten.set(key, now);
	pool
		.query(
			`INSERT INTO feed_readers (reader, site_id, name, position, read_at) VALUES ($1, $2, $3, $4, now())
			 ON CONFLICT (reader) DO UPDATE SET position = excluded.position, name = excluded.name, read_at = now()`,
			[key, reader.siteId, reader.name, reader.position],
		)
		.catch((error: Error) => log.debug({ error: error.message }, 'a reader’s place was not noted'));
}
