// Edge: store. May touch: pool; feed tables, to read.
import type { Pool } from '#lib/server/db/pool.ts';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { formatCursor, parseCursor, shortEpoch } from './feed-cursor.ts';
import { visitPacked } from './journal-codec.ts';
import type { FeedEvent } from './write-batch.ts';

/** One place in the feed. */
export type FeedEntry =
	| {
			kind: 'reading';
			position: number;
			tagId: number;
			at: number;
			value: number | null;
			quality: number;
			isHubTime: boolean;
			isTest: boolean;
	  }
	| { kind: 'event'; position: number; event: FeedEvent };

export interface FeedPage {
	entries: FeedEntry[];
	/** Cursor after the last place looked at, hidden ones included. */
	cursor: string;
	position: number;
}

export interface FeedHead {
	epoch: string;
	position: number;
	oldest: number;
}

/** Where a site's feed stands. */
export async function readFeedHead(pool: Pool, siteId: number): Promise<FeedHead> {
	const found = await pool.query<FeedHead>(
		`SELECT i.epoch, coalesce(h.position, 0) AS position, coalesce(h.oldest, 0) AS oldest FROM installation i LEFT JOIN feed_heads h ON h.site_id = $1`,
		[siteId],
	);
	const head = found.rows[0];
	if (!head) throw new Error('the installation row is missing: the database is not migrated');
	return head;
}

/** The cursor of this moment: reading on from it misses nothing that commits later. */
export async function currentCursor(pool: Pool, siteId: number): Promise<string> {
	return formatCursor(await readFeedHead(pool, siteId));
}

/**
 * Where a reader goes on: after its cursor, at the oldest kept for `0`, now without one.
 * Refusals: 'not-a-cursor'; 'cursor-gone' for another epoch (a restore) or a place older than the feed keeps.
 */
export async function resolveCursor(
	pool: Pool,
	siteId: number,
	after: string | undefined,
): Promise<Outcome<{ position: number; epoch: string }, 'not-a-cursor' | 'cursor-gone'>> {
	const head = await readFeedHead(pool, siteId);
	if (after === undefined) return ok({ position: head.position, epoch: head.epoch });
	const cursor = parseCursor(after);
	if (!cursor) return refuse('not-a-cursor', `"${after.slice(0, 60)}" is no cursor of this feed`);
	if (cursor.epoch === null) return ok({ position: head.oldest, epoch: head.epoch });
	if (cursor.epoch !== shortEpoch(head.epoch))
		return refuse('cursor-gone', 'the store was restored since; begin again with after=0');
	if (cursor.position < head.oldest)
		return refuse(
			'cursor-gone',
			'this place is older than the feed keeps; begin again with after=0 and fill the gap from readings',
		);
	if (cursor.position > head.position)
		return refuse('cursor-gone', 'this place lies ahead of the feed, which was restored since; begin again with after=0');
	return ok({ position: cursor.position, epoch: head.epoch });
}

/** Most journal rows of one query; a row holds one commit. */
const ROWS = 256;
/** Positions that one query looks at where a filter may hide most of them. */
const HIDDEN_WINDOW = 20_000;

/** One commit in the journal: packed readings, or one event. */
export interface JournalRow {
	first_position: number;
	last_position: number;
	readings: Buffer | null;
	event: FeedEvent | null;
}

/**
 * Journal rows after a position in their order, none that begins past `upTo` but the first. The inner query only walks the index:
 * what the page does not need is neither read from disk nor sent, so that a reader far behind pays for its page and not for its lag.
 */
export async function readJournal(pool: Pool, siteId: number, after: number, upTo: number): Promise<JournalRow[]> {
	const found = await pool.query<JournalRow>(
		`SELECT first_position, last_position, readings, event FROM (
			SELECT near.*, row_number() OVER (ORDER BY last_position) AS place FROM (
				SELECT first_position, last_position, readings, event FROM feed_journal WHERE site_id = $1 AND last_position > $2 ORDER BY last_position LIMIT $4
			) AS near
		) AS placed WHERE first_position <= $3 OR place = 1 ORDER BY last_position`,
		[siteId, after, upTo, Math.max(1, Math.min(ROWS, upTo - after))],
	);
	return found.rows;
}

/**
 * Up to `limit` entries after a position, in the one order that all readers share. The position moves on past what `tagIds` hides.
 * Never waits: a transaction that is not committed yet gets later positions than any that is.
 */
export async function readFeed(
	pool: Pool,
	siteId: number,
	from: { position: number; epoch: string },
	{ limit, tagIds }: { limit: number; tagIds?: ReadonlySet<number> | undefined },
): Promise<FeedPage> {
	const entries: FeedEntry[] = [];
	let position = from.position;
	while (entries.length < limit) {
		const rows = await readJournal(pool, siteId, position, position + (tagIds ? HIDDEN_WINDOW : limit - entries.length));
		if (rows.length === 0) break;
		for (const row of rows) {
			if (entries.length >= limit) break;
			if (row.event) {
				if (!tagIds || row.event.tagId === undefined || tagIds.has(row.event.tagId))
					entries.push({ kind: 'event', position: row.last_position, event: row.event });
				position = row.last_position;
				continue;
			}
			if (!row.readings) {
				position = row.last_position;
				continue;
			}
			visitPacked(row.readings, Math.max(0, position - row.first_position + 1), (tagId, at, value, quality, flags, index) => {
				if (entries.length >= limit) return true;
				position = row.first_position + index;
				if (!tagIds || tagIds.has(tagId)) {
					const { isHubTime, isTest } = flags;
					entries.push({ kind: 'reading', position, tagId, at, value, quality, isHubTime, isTest });
				}
				return false;
			});
		}
	}
	return { entries, position, cursor: formatCursor({ epoch: from.epoch, position }) };
}

/** How many readings wait behind a position, and how long the oldest of them has waited. */
export async function findBehind(pool: Pool, siteId: number, position: number): Promise<{ seconds: number; readings: number }> {
	const found = await pool.query<{ head: number; seconds: number | null }>(
		`SELECT coalesce((SELECT position FROM feed_heads WHERE site_id = $1), 0) AS head,
			extract(epoch FROM clock_timestamp() - (SELECT committed_at FROM feed_journal WHERE site_id = $1 AND last_position > $2 ORDER BY last_position LIMIT 1))::float8 AS seconds`,
		[siteId, position],
	);
	const row = found.rows[0];
	const readings = Math.max(0, (row?.head ?? 0) - position);
	return { seconds: readings === 0 ? 0 : Math.max(0, Math.round((row?.seconds ?? 0) * 1_000) / 1_000), readings };
}
