// Edge: store. May touch: pool. One transaction a batch: readings, latest, alarms, judging states, and the feed's place in it.
import type { Client, Pool } from '#lib/server/db/pool.ts';
import { applyAlarmChanges, applyConnectionChanges } from './alarm-events.ts';
import { keepDeadLetters } from './dead-letters.ts';
import { appendJournal, type JournalEntry } from './feed-journal.ts';
import { confirmLatest, upsertLatest } from './latest.ts';
import type { JournalReading } from './journal-codec.ts';
import { createFeedBell } from './feed-bell.ts';
import { ensureJournalDay, ensureReadingDay, dayOf } from './partitions.ts';
import { codeOf, NO_PARTITION, storeReadings } from './store-readings.ts';
import type { FeedEvent, StoredReading, WriteBatch, WriteResult } from './write-batch.ts';

export interface CopyWriter {
	/**
	 * Writes a batch; rejects when the database is away, and then nothing of it is stored. `giveUp` cuts the connection of a write that does not end:
	 * whether it was stored is unknown then, and writing it again is harmless.
	 */
	write(batch: WriteBatch, giveUp?: AbortSignal): Promise<WriteResult>;
	/** Rings the last bell. */
	close(): Promise<void>;
}

/** A writer over its own pool. Several may write at once; the feed's order is made by the row lock of each site's head. */
export function createCopyWriter(pool: Pool, { now }: { now: () => number }): CopyWriter {
	const bell = createFeedBell(pool);
	return {
		async write(batch, giveUp) {
			for (let tries = 0; ; tries += 1) {
				try {
					const result = await writeOnce(pool, batch, now(), tries > 0, giveUp);
					for (const [siteId, position] of result.positions) bell.ring(siteId, position);
					return result;
				} catch (error) {
					if (tries > 2 || !(await mendPartitions(pool, error, batch, now()))) throw error;
				}
			}
		},
		close: () => bell.close(),
	};
}

/** A row or journal entry found no partition (maintenance was not there): makes it; true when trying again makes sense. */
async function mendPartitions(pool: Pool, error: unknown, batch: WriteBatch, now: number): Promise<boolean> {
	if (codeOf(error) !== NO_PARTITION) return false;
	for (const day of new Set(batch.readings.map((reading) => dayOf(reading.at)))) await ensureReadingDay(pool, Date.parse(day));
	await ensureJournalDay(pool, now);
	return true;
}

async function writeOnce(
	pool: Pool,
	batch: WriteBatch,
	now: number,
	doubtAll: boolean,
	giveUp?: AbortSignal,
): Promise<WriteResult> {
	const client = await pool.connect();
	let broken: Error | undefined;
	let isReleased = false;
	const cut = () => {
		isReleased = true;
		client.release(new Error('given up'));
	};
	giveUp?.addEventListener('abort', cut, { once: true });
	try {
		if (giveUp?.aborted) throw new Error('given up');
		await client.query('BEGIN');
		const { stored, duplicates, dead } = await storeReadings(client, batch.readings, now, doubtAll);
		await applyAlarmChanges(client, batch.alarmChanges);
		const told = await applyConnectionChanges(client, batch.connections);
		await upsertLatest(client, batch.latest);
		await confirmLatest(client, batch.confirmations);
		if (batch.judgingStates.length > 0) {
			const states = [...new Map(batch.judgingStates.map((one) => [one.tagId, one])).values()].sort((a, b) => a.tagId - b.tagId);
			await client.query(
				`INSERT INTO judging_states (tag_id, state, updated_at) SELECT g.tag_id, g.state, now() FROM unnest($1::int[], $2::jsonb[]) AS g(tag_id, state)
				 ON CONFLICT (tag_id) DO UPDATE SET state = excluded.state, updated_at = excluded.updated_at`,
				[states.map((one) => one.tagId), states.map((one) => JSON.stringify(one.state))],
			);
		}
		const test = await storeTestReadings(client, batch.testReadings);
		await keepDeadLetters(client, dead);
		// Positions are given as the last act before commit, one writer of a site at a time.
		const positions = await appendJournal(client, entriesOf(stored, test, [...told, ...batch.events]), now);
		await client.query('COMMIT');
		return { stored: stored.length, duplicates, deadLetters: dead.length, positions };
	} catch (error) {
		try {
			await client.query('ROLLBACK');
		} catch (rollbackError) {
			broken = rollbackError as Error;
		}
		throw error;
	} finally {
		giveUp?.removeEventListener('abort', cut);
		if (!isReleased) client.release(broken);
	}
}

/** What the journal keeps of a stored reading. */
export function journalReadingOf(reading: StoredReading): JournalReading {
	return {
		tagId: reading.tagId,
		at: reading.at,
		value: reading.value,
		quality: reading.quality,
		isHubTime: reading.timeFrom === 'hub',
		isTest: false,
	};
}

function entriesOf(
	stored: readonly StoredReading[],
	test: readonly (JournalReading & { siteId: number })[],
	events: readonly FeedEvent[],
): Map<number, JournalEntry> {
	const bySite = new Map<number, JournalEntry>();
	const entryOf = (siteId: number) => {
		const known = bySite.get(siteId);
		if (known) return known;
		const made: JournalEntry = { readings: [], events: [] };
		bySite.set(siteId, made);
		return made;
	};
	for (const reading of stored) entryOf(reading.siteId).readings.push(journalReadingOf(reading));
	for (const reading of test) entryOf(reading.siteId).readings.push(reading);
	for (const event of events) entryOf(event.siteId).events.push(event);
	return bySite;
}

async function storeTestReadings(
	client: Client,
	readings: WriteBatch['testReadings'],
): Promise<(JournalReading & { siteId: number })[]> {
	if (readings.length === 0) return [];
	const fresh = await client.query<{ tag_id: number; at: Date }>(
		`INSERT INTO test_readings (tag_id, at, value, quality)
		 SELECT DISTINCT ON (g.tag_id, g.at) g.tag_id, g.at, g.value, g.quality FROM unnest($1::int[], $2::timestamptz[], $3::float8[], $4::int[]) AS g(tag_id, at, value, quality)
		 ON CONFLICT DO NOTHING RETURNING tag_id, at`,
		[
			readings.map((one) => one.tagId),
			readings.map((one) => new Date(one.at).toISOString()),
			readings.map((one) => one.value),
			readings.map((one) => one.quality | 0),
		],
	);
	const isFresh = new Set(fresh.rows.map((row) => `${row.tag_id}|${new Date(row.at).getTime()}`));
	return readings
		.filter((one) => isFresh.delete(`${one.tagId}|${one.at}`))
		.map((one) => ({
			siteId: one.siteId,
			tagId: one.tagId,
			at: one.at,
			value: one.value,
			quality: one.quality,
			isHubTime: true,
			isTest: true,
		}));
}
