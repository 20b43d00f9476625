// Edge: cli. May touch: the store. What packing costs beside full ingest, as the collector does it: the share of the speed that is left.
import { createCopyWriter, type CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { packDay } from '#lib/pipeline/store/pack-day.ts';
import { ensureReadingDay } from '#lib/pipeline/store/partitions.ts';
import { EMPTY_BATCH } from '#lib/pipeline/store/write-batch.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { benchLine, type BenchLine } from './line.ts';

const DAY_MS = 86_400_000;
const BATCH = 10_000;
/** Batches a round; rounds with and without packing take turns, so that a busy machine slows both. */
const BATCHES = 30;
const ROUNDS = 5;
/** Readings a tag on the day that is packed: one in 10 s. */
const OLD = 8_640;

/** Ours: readings written a second while a day is packed. Reference: the same without. */
export async function benchPacking(pool: Pool, siteId: number, tagIds: readonly number[]): Promise<BenchLine> {
	const day = Math.floor(Date.now() / DAY_MS) * DAY_MS - 30 * DAY_MS;
	await layDay(pool, tagIds, day);
	const writer = createCopyWriter(pool, { now: Date.now });
	let at = Date.now() - 12 * 3_600_000;
	const round = async () => {
		const started = performance.now();
		for (let n = 0; n < BATCHES; n += 1) at = await writeBatch(writer, siteId, tagIds, at);
		return ((BATCHES * BATCH) / (performance.now() - started)) * 1_000;
	};
	await round();
	const ours: number[] = [];
	const reference: number[] = [];
	for (let n = 0; n < ROUNDS; n += 1) {
		reference.push(await round());
		const stop = new AbortController();
		const packing = packDay(pool, new Date(day).toISOString().slice(0, 10), { signal: stop.signal });
		ours.push(await round());
		stop.abort();
		await packing;
	}
	await writer.close();
	const done = await pool.query<{ readings: number; ms: number }>(
		"SELECT coalesce(sum(n), 0) AS readings, (SELECT work_ms FROM packing_state) AS ms FROM reading_blocks WHERE hour >= $1 AND hour < $1::timestamptz + interval '1 day'",
		[new Date(day).toISOString()],
	);
	const { readings = 0, ms = 1 } = done.rows[0] ?? {};
	return benchLine(
		'packing',
		ours,
		reference,
		'readings/s',
		`full ingest while a day is packed against without; ${readings} readings packed meanwhile in ${ms} ms of work, the rest of the time at rest`,
	);
}

async function layDay(pool: Pool, tagIds: readonly number[], day: number): Promise<void> {
	await ensureReadingDay(pool, day);
	await pool.query(
		`INSERT INTO readings (tag_id, at, value, quality, received_at, is_hub_time, revision)
		 SELECT t, at, 850 + 20 * sin(n * t), 0, at + interval '1 millisecond' * (n * t % 900), false, 1
		 FROM unnest($1::int[]) AS t, generate_series(0, $2::int - 1) AS n, LATERAL (SELECT $3::timestamptz + interval '10 seconds' * n AS at) times`,
		[tagIds, OLD, new Date(day).toISOString()],
	);
	await pool.query('ANALYZE readings');
}

async function writeBatch(writer: CopyWriter, siteId: number, tagIds: readonly number[], at: number): Promise<number> {
	const readings = Array.from({ length: BATCH }, (_, i) => ({
		siteId,
		tagId: tagIds[i % tagIds.length] ?? 0,
		at: at + Math.floor(i / tagIds.length),
		value: 2 + Math.sin(at + i) / 3,
		quality: 0,
		timeFrom: 'source' as const,
		receivedAt: at,
		sourceAt: null,
		reason: null,
		raw: 2,
		rawKept: null,
		wire: null,
		revision: 1,
	}));
	await writer.write({ ...EMPTY_BATCH, readings });
	return at + Math.ceil(BATCH / tagIds.length);
}
