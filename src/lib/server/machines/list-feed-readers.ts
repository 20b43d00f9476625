// Edge: machines. May touch: feed readers, to read.
import { sql } from 'drizzle-orm';
import type { Db } from '#lib/server/db/pool.ts';

/** Names of those that read a site's feed within the last day, the latest first; at most 12. Every reader gets all of a site's tags. */
export async function listFeedReaders(db: Db, siteId: number): Promise<string[]> {
	const found = await db.execute<{ name: string }>(
		sql`SELECT name FROM feed_readers WHERE site_id = ${siteId} AND read_at > now() - interval '1 day' ORDER BY read_at DESC LIMIT 12`,
	);
	return found.rows.map((row) => row.name);
}
