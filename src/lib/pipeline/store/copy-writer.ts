// Edge: store. May touch: pool, COPY. One transaction a batch: readings, latest, alarms, judging states, and the feed's place in it.
import { pipeline } from 'node:stream/promises';
import { Readable } from 'node:stream';
import { from as copyFrom } from 'pg-copy-streams';
import type { Client, Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';
import { applyAlarmChanges } from './alarm-events.ts';
import { copyLines, faultOf } from './copy-format.ts';
import { appendJournal, type JournalEntry } from './feed-journal.ts';
import { confirmLatest, upsertLatest } from './latest.ts';
import type { JournalReading } from './journal-codec.ts';
import { createFeedBell } from './feed-bell.ts';
import { ensureJournalDay, ensureReadingDay, dayOf, rawEdgeOf } from './partitions.ts';
import type { StoredReading, WriteBatch, WriteResult } from './write-batch.ts';

const COLUMNS = 'tag_id, at, value, quality, received_at, is_hub_time, revision, source_at, reason, raw';
const UNIQUE_VIOLATION = '23505';
const NO_PARTITION = '23514';
/** Codes that say a row cannot be stored as it is: data exceptions and violated rules; anything else is the database's trouble and the batch is kept. */
const POISON = /^(22|23)/;

export interface CopyWriter {
	/** Writes a batch; rejects when the database is away, and then nothing of it is stored. */
	write(batch: WriteBatch): Promise<WriteResult>;
	/** Rings the last bell. */
	close(): Promise<void>;
}

/** A writer over its own pool. Several may write at once; the feed's order is made by the row lock of each site's head. */
export function createCopyWriter(pool: Pool, { now }: { now: () => number }): CopyWriter {
	const bell = createFeedBell(pool);
	return {
		async write(batch) {
			for (let tries = 0; ; tries += 1) {
				try {
					const result = await writeOnce(pool, batch, now());
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

function codeOf(error: unknown): string {
	return error instanceof Error && 'code' in error ? String(error.code) : '';
}

/** A row or journal entry found no partition (maintenance was not there): makes it; true when trying again makes sense. */
async function mendPartitions(pool: Pool, error: unknown, batch: WriteBatch, now: number): Promise<boolean> {
	if (codeOf(error) !== NO_PARTITION) return false;
	for (const day of new Set(batch.readings.map((reading) => dayOf(reading.at)))) await ensureReadingDay(pool, Date.parse(day));
	await ensureJournalDay(pool, now);
	return true;
}

async function writeOnce(pool: Pool, batch: WriteBatch, now: number): Promise<WriteResult> {
	const client = await pool.connect();
	let broken: Error | undefined;
	try {
		await client.query('BEGIN');
		const { stored, duplicates, dead } = await storeReadings(client, batch.readings, now);
		await applyAlarmChanges(client, batch.alarmChanges);
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
		for (const { reading, reason } of dead) {
			await client.query('INSERT INTO dead_letters (site_id, tag_id, reason, row) VALUES ($1, $2, $3, $4)', [
				reading.siteId,
				reading.tagId,
				reason,
				JSON.stringify(printable(reading)),
			]);
		}
		// Positions are given as the last act before commit, one writer of a site at a time.
		const positions = await appendJournal(client, entriesOf(stored, test, batch), now);
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
		client.release(broken);
	}
}

function printable(reading: StoredReading): Record<string, unknown> {
	const text = (value: string | null) => value?.replaceAll('\u0000', '\\u0000') ?? null;
	return {
		...reading,
		raw: reading.raw === null ? null : text(String(reading.raw)),
		rawKept: text(reading.rawKept),
		wire: text(reading.wire),
	};
}

function entriesOf(
	stored: readonly StoredReading[],
	test: readonly (JournalReading & { siteId: number })[],
	batch: WriteBatch,
): Map<number, JournalEntry> {
	const bySite = new Map<number, JournalEntry>();
	const entryOf = (siteId: number) => {
		const known = bySite.get(siteId);
		if (known) return known;
		const made: JournalEntry = { readings: [], events: [] };
		bySite.set(siteId, made);
		return made;
	};
	for (const reading of stored) {
		entryOf(reading.siteId).readings.push({
			tagId: reading.tagId,
			at: reading.at,
			value: reading.value,
			quality: reading.quality,
			isHubTime: reading.timeFrom === 'hub',
			isTest: false,
		});
	}
	for (const reading of test) entryOf(reading.siteId).readings.push(reading);
	for (const event of batch.events) entryOf(event.siteId).events.push(event);
	return bySite;
}

interface Dead {
	reading: StoredReading;
	reason: string;
}

async function storeReadings(
	client: Client,
	readings: readonly StoredReading[],
	now: number,
): Promise<{ stored: StoredReading[]; duplicates: number; dead: Dead[] }> {
	const dead: Dead[] = [];
	const edge = rawEdgeOf(now);
	const sound: StoredReading[] = [];
	for (const reading of readings) {
		// Older than what is kept: never a new partition.
		const fault = faultOf(reading) ?? (reading.at < edge ? 'older-than-retention' : null);
		if (fault) dead.push({ reading, reason: fault });
		else sound.push(reading);
	}
	if (sound.length === 0) return { stored: [], duplicates: 0, dead };
	const outcome = await copyOrStage(client, sound, dead);
	return { ...outcome, dead };
}

/** COPY first; on a duplicate through a staging table; a row that the database refuses is found by halving and set aside. */
async function copyOrStage(
	client: Client,
	readings: StoredReading[],
	dead: Dead[],
): Promise<{ stored: StoredReading[]; duplicates: number }> {
	await client.query('SAVEPOINT copy');
	try {
		await copyInto(client, 'readings', readings);
		await client.query('RELEASE SAVEPOINT copy');
		return { stored: readings, duplicates: 0 };
	} catch (error) {
		const code = codeOf(error);
		if (!POISON.test(code) || code === NO_PARTITION) throw error;
		await client.query('ROLLBACK TO SAVEPOINT copy');
		if (code === UNIQUE_VIOLATION) return stage(client, readings);
		if (readings.length === 1 && readings[0]) {
			log.warn({ code, tagId: readings[0].tagId }, 'a reading could not be stored and was set aside');
			dead.push({ reading: readings[0], reason: `refused-by-store ${code}` });
			return { stored: [], duplicates: 0 };
		}
		const middle = readings.length >> 1;
		const left = await copyOrStage(client, readings.slice(0, middle), dead);
		const right = await copyOrStage(client, readings.slice(middle), dead);
		return { stored: [...left.stored, ...right.stored], duplicates: left.duplicates + right.duplicates };
	}
}

async function copyInto(client: Client, table: string, readings: readonly StoredReading[]): Promise<void> {
	const stream = client.query(copyFrom(`COPY ${table} (${COLUMNS}) FROM STDIN`));
	await pipeline(Readable.from(copyLines(readings), { objectMode: false, highWaterMark: 256 * 1024 }), stream);
}

async function stage(client: Client, readings: StoredReading[]): Promise<{ stored: StoredReading[]; duplicates: number }> {
	await client.query(`CREATE TEMP TABLE IF NOT EXISTS staged (LIKE readings INCLUDING DEFAULTS) ON COMMIT DELETE ROWS`);
	await client.query(`ALTER TABLE staged ADD COLUMN IF NOT EXISTS place integer GENERATED ALWAYS AS IDENTITY`);
	await client.query('TRUNCATE staged RESTART IDENTITY');
	await copyInto(client, 'staged', readings);
	const fresh = await client.query<{ tag_id: number; at: Date; value: number | null; quality: number }>(
		`INSERT INTO readings (${COLUMNS}) SELECT ${COLUMNS} FROM staged ORDER BY place ON CONFLICT DO NOTHING RETURNING tag_id, at, value, quality`,
	);
	const key = (tagId: number, at: number, value: number | null, quality: number) => `${tagId}|${at}|${value}|${quality | 0}`;
	const isFresh = new Set(fresh.rows.map((row) => key(row.tag_id, new Date(row.at).getTime(), row.value, row.quality)));
	const stored: StoredReading[] = [];
	for (const reading of readings) {
		// The first of equals within the batch is the stored one.
		if (isFresh.delete(key(reading.tagId, reading.at, reading.value, reading.quality))) stored.push(reading);
	}
	return { stored, duplicates: readings.length - stored.length };
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
