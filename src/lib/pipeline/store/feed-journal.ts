// Edge: store. May touch: feed tables, in the caller's transaction.
import type { Client } from '#lib/server/db/pool.ts';
import { packReadings, type JournalReading } from './journal-codec.ts';
import { ensureJournalDay } from './partitions.ts';
import type { FeedEvent } from './write-batch.ts';

export interface JournalEntry {
	readings: JournalReading[];
	events: FeedEvent[];
}

/**
 * Gives positions and writes the journal: the caller's last act before commit. The head's row lock is held until then, so that positions of a site
 * become visible in their order, whatever else runs in the cluster. Sites in order of id, so that two writers never wait for each other.
 */
export async function appendJournal(
	client: Client,
	entries: ReadonlyMap<number, JournalEntry>,
	now: number,
): Promise<Map<number, number>> {
	const positions = new Map<number, number>();
	for (const [siteId, { readings, events }] of [...entries].sort(([a], [b]) => a - b)) {
		const count = readings.length + events.length;
		if (count === 0) continue;
		const head = await client.query<{ position: number }>(
			`INSERT INTO feed_heads AS h (site_id, position) VALUES ($1, $2) ON CONFLICT (site_id) DO UPDATE SET position = h.position + $2 RETURNING position`,
			[siteId, count],
		);
		const last = head.rows[0]?.position ?? count;
		let next = last - count + 1;
		if (readings.length > 0) {
			await client.query(
				'INSERT INTO feed_journal (committed_on, site_id, last_position, first_position, committed_at, readings) VALUES ($1, $2, $3, $4, $5, $6)',
				[
					new Date(now).toISOString().slice(0, 10),
					siteId,
					next + readings.length - 1,
					next,
					new Date(now).toISOString(),
					packReadings(readings),
				],
			);
			next += readings.length;
		}
		for (const event of events) {
			await client.query(
				'INSERT INTO feed_journal (committed_on, site_id, last_position, first_position, committed_at, event) VALUES ($1, $2, $3, $3, $4, $5)',
				[new Date(now).toISOString().slice(0, 10), siteId, next, new Date(now).toISOString(), JSON.stringify(event)],
			);
			next += 1;
		}
		positions.set(siteId, last);
	}
	return positions;
}

/** Appends events of another change (a tag renamed, a source lost) within that change's transaction; call it last. */
export async function appendFeedEvents(client: Client, siteId: number, events: readonly FeedEvent[], now: number): Promise<void> {
	if (events.length === 0) return;
	// A change may come before any collector has run; the journal's day must not be missing for it.
	await ensureJournalDay(client, now);
	const positions = await appendJournal(client, new Map([[siteId, { readings: [], events: [...events] }]]), now);
	// Delivered at commit; one a change of configuration, never one a reading.
	for (const [site, position] of positions) await client.query("SELECT pg_notify('millrace_feed', $1)", [`${site}:${position}`]);
}
