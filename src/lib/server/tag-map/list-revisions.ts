// Edge: tag map. May touch: revision tables.
import { sql } from 'drizzle-orm';
import { diffMaps, type MapDiff } from '#lib/domain/tag-map/diff.ts';
import type { Db } from '#lib/server/db/pool.ts';
import { findRevision, findRevisionRows } from './find-map.ts';

export interface RevisionEntry {
	revision: number;
	publishedAt: Date;
	publishedBy: string;
	note: string;
	started: number;
	stopped: number;
	changed: number;
	restoredFrom: number | null;
}

/** Revisions, newest first; `before` continues a page. */
export async function listRevisions(
	db: Db,
	siteId: number,
	{ before, limit }: { before: number | null; limit: number },
): Promise<RevisionEntry[]> {
	const found = await db.execute<{
		revision: number;
		published_at: Date;
		published_by: string;
		note: string;
		started: number;
		stopped: number;
		changed: number;
		restored_from: number | null;
	}>(
		sql`SELECT revision, published_at, published_by, note, started, stopped, changed, restored_from FROM map_revisions
			WHERE site_id = ${siteId} AND (${before}::int IS NULL OR revision < ${before}::int) ORDER BY revision DESC LIMIT ${limit}`,
	);
	return found.rows.map((row) => ({
		revision: row.revision,
		publishedAt: new Date(row.published_at),
		publishedBy: row.published_by,
		note: row.note,
		started: row.started,
		stopped: row.stopped,
		changed: row.changed,
		restoredFrom: row.restored_from,
	}));
}

/** What stands between two revisions; null when one of them does not exist. Revision 0 is the empty map before the first. */
export async function compareRevisions(db: Db, siteId: number, from: number, to: number): Promise<MapDiff | null> {
	const newest = await findRevision(db, siteId);
	if (from < 0 || to < 0 || from > newest || to > newest) return null;
	return diffMaps(await findRevisionRows(db, siteId, from), await findRevisionRows(db, siteId, to));
}
