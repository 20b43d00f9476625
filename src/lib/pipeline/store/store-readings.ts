// Edge: store. May touch: COPY and the reading tables, in the caller's transaction. Rows for days that are open, late rows for days that are packed.
import { pipeline } from 'node:stream/promises';
import { Readable } from 'node:stream';
import { from as copyFrom } from 'pg-copy-streams';
import { LEAST_ROW_DAYS } from '#lib/domain/retention.ts';
import type { Client } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';
import { copyLines, faultOf } from './copy-format.ts';
import { rawDaysOf } from './retention.ts';
import type { StoredReading } from './write-batch.ts';

const COLUMNS = 'tag_id, at, value, quality, received_at, is_hub_time, revision, source_at, reason, raw';
const DAY_MS = 86_400_000;
const UNIQUE_VIOLATION = '23505';
/** A row found no partition. */
export const NO_PARTITION = '23514';
/** Codes that say a row cannot be stored as it is: data exceptions and violated rules; anything else is the database's trouble and the batch is kept. */
const POISON = /^(22|23)/;

export interface Dead {
	reading: StoredReading;
	reason: string;
}

interface Outcome {
	stored: StoredReading[];
	duplicates: number;
}

export function codeOf(error: unknown): string {
	return error instanceof Error && 'code' in error ? String(error.code) : '';
}

/**
 * Stores what is new of `readings`; what is stored already, packed or not, counts as a duplicate; what cannot be stored comes back with its reason.
 * `doubtAll` looks at the packing edge for every reading, as after a row found no partition: this process's clock may be wrong.
 */
export async function storeReadings(
	client: Client,
	readings: readonly StoredReading[],
	now: number,
	doubtAll: boolean,
): Promise<Outcome & { dead: Dead[] }> {
	const dead: Dead[] = [];
	const recent: StoredReading[] = [];
	const old: StoredReading[] = [];
	// A day of margin for this clock against the one that packs.
	const certain = doubtAll ? Infinity : now - (LEAST_ROW_DAYS - 1) * DAY_MS;
	for (const reading of readings) {
		const fault = faultOf(reading);
		if (fault) dead.push({ reading, reason: fault });
		else if (reading.at < certain) old.push(reading);
		else recent.push(reading);
	}
	const late = old.length === 0 ? [] : await takeLate(client, old, { now, recent, dead });
	const open = recent.length === 0 ? { stored: [], duplicates: 0 } : await storeSound(client, recent, dead, copyAll);
	const closed = late.length === 0 ? { stored: [], duplicates: 0 } : await storeSound(client, late, dead, stageLate);
	return { stored: [...open.stored, ...closed.stored], duplicates: open.duplicates + closed.duplicates, dead };
}

/** Those of `old` for days that are packed or being packed; the others join `recent` or, past the retention of their tag, `dead`. */
async function takeLate(
	client: Client,
	old: readonly StoredReading[],
	to: { now: number; recent: StoredReading[]; dead: Dead[] },
): Promise<StoredReading[]> {
	const daysOf = await rawDaysOf(client, [...new Set(old.map((one) => one.tagId))]);
	// Shared, and held to the commit: a day is closed, and late rows become blocks, only when nobody is between this look and its commit.
	const state = await client.query<{ closed_ms: number }>(
		`SELECT CASE WHEN isfinite(closed_until) THEN extract(epoch FROM closed_until) * 1000 ELSE '-infinity' END::float8 AS closed_ms FROM packing_state FOR SHARE`,
	);
	const closedUntil = state.rows[0]?.closed_ms ?? -Infinity;
	const late: StoredReading[] = [];
	for (const reading of old) {
		// Older than what is kept: never a new partition.
		if (reading.at < to.now - daysOf(reading.tagId) * DAY_MS) to.dead.push({ reading, reason: 'older-than-retention' });
		else if (reading.at < closedUntil) late.push(reading);
		else to.recent.push(reading);
	}
	return late;
}

/** One go for all, COPY first and on a duplicate through a staging table; a row that the database refuses is found by halving and set aside. */
async function storeSound(
	client: Client,
	readings: StoredReading[],
	dead: Dead[],
	store: (client: Client, readings: StoredReading[]) => Promise<Outcome>,
): Promise<Outcome> {
	await client.query('SAVEPOINT sound');
	try {
		const outcome = await store(client, readings);
		await client.query('RELEASE SAVEPOINT sound');
		return outcome;
	} catch (error) {
		const code = codeOf(error);
		if (!POISON.test(code) || code === NO_PARTITION) throw error;
		await client.query('ROLLBACK TO SAVEPOINT sound');
		if (code === UNIQUE_VIOLATION && store === copyAll) return storeSound(client, readings, dead, stageOpen);
		if (readings.length === 1 && readings[0]) {
			log.warn({ code, tagId: readings[0].tagId }, 'a reading could not be stored and was set aside');
			dead.push({ reading: readings[0], reason: `refused-by-store ${code}` });
			return { stored: [], duplicates: 0 };
		}
		const middle = readings.length >> 1;
		const left = await storeSound(client, readings.slice(0, middle), dead, store);
		const right = await storeSound(client, readings.slice(middle), dead, store);
		return { stored: [...left.stored, ...right.stored], duplicates: left.duplicates + right.duplicates };
	}
}

async function copyAll(client: Client, readings: StoredReading[]): Promise<Outcome> {
	await copyInto(client, 'readings', readings);
	return { stored: readings, duplicates: 0 };
}

async function stageOpen(client: Client, readings: StoredReading[]): Promise<Outcome> {
	await fillStage(client, readings);
	return keepFresh(
		readings,
		await client.query<FreshRow>(
			`INSERT INTO readings (${COLUMNS}) SELECT ${COLUMNS} FROM staged ORDER BY place ON CONFLICT DO NOTHING RETURNING tag_id, at, value, quality`,
		),
	);
}

/** Late rows that no block, row or late row equals. Each tag and hour is read once, however many of its readings came. */
async function stageLate(client: Client, readings: StoredReading[]): Promise<Outcome> {
	await fillStage(client, readings);
	return keepFresh(
		readings,
		await client.query<FreshRow>(
			`WITH touched AS MATERIALIZED (
				SELECT DISTINCT tag_id, date_bin(interval '1 hour', at, timestamptz '2000-01-01 00:00:00+00') AS hour FROM staged
			), known AS MATERIALIZED (
				SELECT h.tag_id, h.at, h.value, h.quality FROM touched t CROSS JOIN LATERAL (
					SELECT tag_id, at, value, quality FROM reading_history
					WHERE tag_id = t.tag_id AND hour = t.hour AND at >= t.hour AND at < t.hour + interval '1 hour' OFFSET 0) h
			)
			INSERT INTO late_readings (${COLUMNS}) SELECT ${COLUMNS} FROM staged s
			WHERE NOT EXISTS (SELECT FROM known k WHERE k.tag_id = s.tag_id AND k.at = s.at AND k.quality = s.quality AND k.value IS NOT DISTINCT FROM s.value)
			ORDER BY place ON CONFLICT DO NOTHING RETURNING tag_id, at, value, quality`,
		),
	);
}

async function copyInto(client: Client, table: string, readings: readonly StoredReading[]): Promise<void> {
	const stream = client.query(copyFrom(`COPY ${table} (${COLUMNS}) FROM STDIN`));
	await pipeline(Readable.from(copyLines(readings), { objectMode: false, highWaterMark: 256 * 1024 }), stream);
}

async function fillStage(client: Client, readings: readonly StoredReading[]): Promise<void> {
	await client.query(`CREATE TEMP TABLE IF NOT EXISTS staged (LIKE readings INCLUDING DEFAULTS) ON COMMIT DELETE ROWS`);
	await client.query(`ALTER TABLE staged ADD COLUMN IF NOT EXISTS place integer GENERATED ALWAYS AS IDENTITY`);
	await client.query('TRUNCATE staged RESTART IDENTITY');
	await copyInto(client, 'staged', readings);
}

interface FreshRow {
	tag_id: number;
	at: Date;
	value: number | null;
	quality: number;
}

function keepFresh(readings: readonly StoredReading[], fresh: { rows: FreshRow[] }): Outcome {
	const key = (tagId: number, at: number, value: number | null, quality: number) => `${tagId}|${at}|${value}|${quality | 0}`;
	const isFresh = new Set(fresh.rows.map((row) => key(row.tag_id, new Date(row.at).getTime(), row.value, row.quality)));
	const stored: StoredReading[] = [];
	for (const reading of readings) {
		// The first of equals within the batch is the stored one.
		if (isFresh.delete(key(reading.tagId, reading.at, reading.value, reading.quality))) stored.push(reading);
	}
	return { stored, duplicates: readings.length - stored.length };
}
