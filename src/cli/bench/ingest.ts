// Edge: cli. May touch: the store. From decoded samples to committed rows against bare COPY, and with a full store against an empty one.
import { pipeline } from 'node:stream/promises';
import { Readable } from 'node:stream';
import { from as copyFrom } from 'pg-copy-streams';
import { freshState, judge } from '#lib/pipeline/evaluate/evaluate.ts';
import { copyLines } from '#lib/pipeline/store/copy-format.ts';
import { createCopyWriter, type CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { ensureReadingDay } from '#lib/pipeline/store/partitions.ts';
import { EMPTY_BATCH, type LatestUpdate, type StoredReading } from '#lib/pipeline/store/write-batch.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { benchLine, type BenchLine } from './line.ts';

const BATCH = 10_000;
const ROUNDS = 5;
/** Readings of a round. */
export const ROWS = 100_000;
const DAY_MS = 86_400_000;
/** Rows of a full store; MILLRACE_BENCH_ROWS for another number. */
const FULL_ROWS = Number(process.env.MILLRACE_BENCH_ROWS ?? 50_000_000);
const FULL_DAYS = 5;

/** Readings of a stretch of their own, so that no two rounds share one. */
function readingsOf(siteId: number, tagIds: readonly number[], round: number, begin: number): StoredReading[] {
	return Array.from({ length: ROWS }, (_, i) => {
		const at = begin + round * ROWS + i;
		return {
			siteId,
			tagId: tagIds[i % tagIds.length] ?? 0,
			at,
			value: 2 + Math.sin(i) / 3,
			quality: 0,
			timeFrom: 'source' as const,
			receivedAt: at,
			sourceAt: null,
			reason: null,
			raw: 2,
			rawKept: null,
			wire: null,
			revision: 1,
		};
	});
}

const PLAN = { limits: [{ tag: '', kind: 'high' as const, level: 'alert' as const, value: 9, limitId: 1 }], staleAfterS: 30 };

/** A round of ours: judged, written with latest values and the feed's journal. Answers readings a second. */
export async function writeRound(
	writer: CopyWriter,
	siteId: number,
	tagIds: readonly number[],
	round: number,
	begin: number,
): Promise<number> {
	const mine = readingsOf(siteId, tagIds, round, begin);
	const started = performance.now();
	const states = new Map<number, ReturnType<typeof freshState>>();
	for (let start = 0; start < ROWS; start += BATCH) {
		const batch = mine.slice(start, start + BATCH);
		const latest = new Map<number, LatestUpdate>();
		for (const reading of batch) {
			const judged = judge(reading, PLAN, states.get(reading.tagId) ?? null, { now: Date.now() });
			states.set(reading.tagId, judged.state);
			latest.set(reading.tagId, {
				tagId: reading.tagId,
				at: reading.at,
				value: reading.value,
				quality: reading.quality,
				receivedAt: reading.receivedAt,
				confirmedAt: reading.receivedAt,
				isHubTime: false,
				sourceAt: null,
				reason: null,
				raw: '2',
				wire: null,
				verdict: judged.verdict,
				isStale: false,
				revision: 1,
				resets: false,
			});
		}
		await writer.write({
			...EMPTY_BATCH,
			readings: batch,
			latest: [...latest.values()],
			judgingStates: [...states].map(([tagId, state]) => ({ tagId, state })),
		});
	}
	return (ROWS / (performance.now() - started)) * 1_000;
}

/** A round of the reference: COPY of such rows into the same table, and nothing else. */
async function copyRound(pool: Pool, siteId: number, tagIds: readonly number[], round: number, begin: number): Promise<number> {
	const bare = readingsOf(siteId, tagIds, round, begin);
	const started = performance.now();
	for (let start = 0; start < ROWS; start += BATCH) {
		const client = await pool.connect();
		try {
			await client.query('BEGIN');
			const stream = client.query(
				copyFrom(
					'COPY readings (tag_id, at, value, quality, received_at, is_hub_time, revision, source_at, reason, raw) FROM STDIN',
				),
			);
			await pipeline(Readable.from(copyLines(bare.slice(start, start + BATCH)), { objectMode: false }), stream);
			await client.query('COMMIT');
		} finally {
			client.release();
		}
	}
	return (ROWS / (performance.now() - started)) * 1_000;
}

/** Ours and bare COPY in turn, a commit every 10,000 rows both. */
export async function benchIngest(pool: Pool, siteId: number, tagIds: readonly number[]): Promise<BenchLine> {
	const writer = createCopyWriter(pool, { now: Date.now });
	const begin = Date.now() - 6 * 3_600_000;
	const ours: number[] = [];
	const reference: number[] = [];
	for (let round = 0; round < ROUNDS; round += 1) {
		ours.push(await writeRound(writer, siteId, tagIds, round * 2, begin));
		reference.push(await copyRound(pool, siteId, tagIds, round * 2 + 1, begin));
	}
	await writer.close();
	return benchLine(
		'ingest',
		ours,
		reference,
		'readings/s',
		`${ROUNDS} rounds of ${ROWS} readings of ${tagIds.length} tags in turn with bare COPY, a commit every ${BATCH}, fsync on`,
	);
}

/** Ours with many rows stored against ours with an empty store, in turn. Rows are laid over the days before today, which are not packed yet. */
export async function benchIngestGrowth(
	full: { pool: Pool; siteId: number; tagIds: readonly number[] },
	empty: { pool: Pool; siteId: number; tagIds: readonly number[] },
): Promise<BenchLine> {
	const today = Math.floor(Date.now() / DAY_MS) * DAY_MS;
	const started = performance.now();
	for (let day = 1; day <= FULL_DAYS; day += 1) {
		const begin = today - day * DAY_MS;
		await ensureReadingDay(full.pool, begin);
		const rows = Math.floor(FULL_ROWS / FULL_DAYS / full.tagIds.length);
		await full.pool.query(
			`INSERT INTO readings (tag_id, at, value, quality, received_at, is_hub_time, revision)
			 SELECT t, $1::timestamptz + n * interval '1 millisecond' * $3, 2 + sin(n), 0, $1::timestamptz + n * interval '1 millisecond' * $3, false, 1
			 FROM generate_series(0, $2::int - 1) AS n, unnest($4::int[]) AS t`,
			[new Date(begin).toISOString(), rows, Math.max(1, Math.floor(DAY_MS / rows) - 1), full.tagIds],
		);
	}
	const filledS = Math.round((performance.now() - started) / 1_000);
	await full.pool.query('CHECKPOINT').catch(() => undefined);
	const [ours, reference]: [number[], number[]] = [[], []];
	const writers = [createCopyWriter(full.pool, { now: Date.now }), createCopyWriter(empty.pool, { now: Date.now })] as const;
	const begin = Date.now() - 2 * 3_600_000;
	for (let round = 0; round < ROUNDS; round += 1) {
		ours.push(await writeRound(writers[0], full.siteId, full.tagIds, round, begin));
		reference.push(await writeRound(writers[1], empty.siteId, empty.tagIds, round, begin));
	}
	for (const writer of writers) await writer.close();
	return benchLine(
		'ingest-growth',
		ours,
		reference,
		'readings/s',
		`${FULL_ROWS} rows stored (laid in ${filledS} s) against an empty store, ${ROUNDS} rounds of ${ROWS} in turn`,
	);
}
