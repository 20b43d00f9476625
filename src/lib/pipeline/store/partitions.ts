// Edge: store. May touch: pool; partition functions of the database.
import type { Client, Pool } from '#lib/server/db/pool.ts';
import { RETENTION } from '#lib/domain/retention.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { longestRawDays, readRetention } from './retention.ts';

const DAY_MS = 86_400_000;
/** Days kept ready ahead of now; maintenance runs hourly, so a week of it may fail before anything is missed. */
const DAYS_AHEAD = 7;

/** `2026-12-01` of a time, UTC. */
export function dayOf(at: number): string {
	return new Date(at).toISOString().slice(0, 10);
}

function monthOf(at: number, plus = 0): string {
	const date = new Date(at);
	return new Date(Date.UTC(date.getUTCFullYear(), date.getUTCMonth() + plus, 1)).toISOString().slice(0, 10);
}

type Queryable = Pick<Pool, 'query'> | Pick<Client, 'query'>;

/** Makes the partition of readings for the day of `at`; true when it was missing. */
export async function ensureReadingDay(client: Queryable, at: number): Promise<boolean> {
	const answer = await client.query<{ made: boolean }>("SELECT ensure_partition('readings', $1::date, $2::date) AS made", [
		dayOf(at),
		dayOf(at + DAY_MS),
	]);
	return answer.rows[0]?.made ?? false;
}

/** Makes the roll-up partitions of the month of `at`. */
export async function ensureRollupMonth(client: Queryable, at: number): Promise<void> {
	for (const parent of ['rollups_minute', 'rollups_hour'])
		await client.query('SELECT ensure_partition($1, $2::date, $3::date)', [parent, monthOf(at), monthOf(at, 1)]);
}

/** Makes the journal's partition of a day. */
export async function ensureJournalDay(client: Queryable, at: number): Promise<void> {
	await client.query("SELECT ensure_partition('feed_journal', $1::date, $2::date)", [dayOf(at), dayOf(at + DAY_MS)]);
}

/** Makes the partition of exchanges around failures for a day. */
export async function ensureExchangeDay(client: Queryable, at: number): Promise<void> {
	await client.query("SELECT ensure_partition('source_exchanges', $1::date, $2::date)", [dayOf(at), dayOf(at + DAY_MS)]);
}

/** Makes every partition that the next week needs; harmless when they are there. Run at start and hourly. */
export async function ensurePartitionsAhead(client: Queryable, now: number): Promise<void> {
	for (let day = -1; day <= DAYS_AHEAD; day += 1) {
		await ensureReadingDay(client, now + day * DAY_MS);
		await ensureJournalDay(client, now + day * DAY_MS);
	}
	for (const at of [now - 31 * DAY_MS, now, now + 31 * DAY_MS]) await ensureRollupMonth(client, at);
}

/** Oldest time of which raw readings are kept for `rawDays`. */
export function rawEdgeOf(now: number, rawDays: number = RETENTION.rawDays): number {
	return now - rawDays * DAY_MS;
}

/**
 * Drops partitions past their retention, by the wall clock and never by the newest row, so that one reading from the future empties nothing.
 * Answers how many were dropped.
 */
export async function dropExpired(pool: Pool, now: number): Promise<number> {
	const retention = await readRetention(pool);
	// Rows of several rules share a day; they are packed long before, and only then kept apart.
	const rowDays = await longestRawDays(pool);
	const blocks = await pool.query<{ n: number }>('SELECT drop_expired_blocks($1, $2) AS n', [
		new Date(now).toISOString(),
		retention.rawDays,
	]);
	let dropped = blocks.rows[0]?.n ?? 0;
	for (const [parent, days] of [
		['readings', rowDays],
		['rollups_minute', retention.minuteDays],
		['rollups_hour', retention.hourDays],
		['feed_journal', retention.journalDays],
		['source_exchanges', retention.exchangeDays],
	] as const) {
		const answer = await pool.query<{ n: number }>('SELECT drop_partitions($1, $2::date) AS n', [
			parent,
			dayOf(now - days * DAY_MS),
		]);
		dropped += answer.rows[0]?.n ?? 0;
	}
	// What the journal no longer holds is below every cursor's reach.
	const sites = await pool.query<{ site_id: number }>('SELECT site_id FROM feed_heads ORDER BY site_id');
	for (const { site_id: siteId } of sites.rows) await moveOldest(pool, siteId);
	return dropped;
}

/** Moves a site's oldest place up to what its journal still holds. */
async function moveOldest(pool: Pool, siteId: number): Promise<void> {
	await inTransaction(pool, async (_, client) => {
		// The head is locked first: a statement that waited for a writer would see its new position beside a journal without its row.
		await client.query('SELECT 1 FROM feed_heads WHERE site_id = $1 FOR UPDATE', [siteId]);
		await client.query(
			`UPDATE feed_heads h SET oldest = kept.oldest
			 FROM (SELECT coalesce((SELECT min(first_position) - 1 FROM feed_journal WHERE site_id = $1), (SELECT position FROM feed_heads WHERE site_id = $1)) AS oldest) kept
			 WHERE h.site_id = $1 AND h.oldest < kept.oldest`,
			[siteId],
		);
	});
}
