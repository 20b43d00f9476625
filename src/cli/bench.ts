// Edge: cli. May touch: the store, a PostgreSQL cluster of its own. `npm run bench`: speed as a ratio against a bare reference in the same run.
import { spawnSync } from 'node:child_process';
import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { pipeline } from 'node:stream/promises';
import { Readable } from 'node:stream';
import { from as copyFrom } from 'pg-copy-streams';
import { feedLines } from '#lib/pipeline/feeds/feed-lines.ts';
import { copyLines } from '#lib/pipeline/store/copy-format.ts';
import { createCopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { readFeedHead, resolveCursor } from '#lib/pipeline/store/find-feed.ts';
import { ensurePartitionsAhead } from '#lib/pipeline/store/partitions.ts';
import { EMPTY_BATCH, type LatestUpdate, type StoredReading } from '#lib/pipeline/store/write-batch.ts';
import { freshState, judge } from '#lib/pipeline/evaluate/evaluate.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { migrateDatabase } from '#lib/server/db/migrate.ts';
import { createBenchCluster } from './bench-cluster.ts';
import { benchLine, type BenchLine } from './bench/line.ts';
import { benchFreshness } from './bench/freshness.ts';
import { benchOpcua } from './bench/opcua.ts';
import { benchModbus } from './bench/modbus.ts';
import { benchMqtt } from './bench/mqtt.ts';
import { benchPacking } from './bench/packing.ts';
import { benchPages } from './bench/pages.ts';
import { benchTrendGrowth } from './bench/trend-growth.ts';
import { Refusal } from './bootstrap.js';

const BATCH = 10_000;
const ROUNDS = 5;
const ROWS = 100_000;
const TAGS = 500;

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

/** Ours: judged, written with latest values and the feed's journal. Reference: bare COPY of the same rows into the same table. A commit every 10,000 rows both. */
async function ingest(pool: Pool, siteId: number, tagIds: readonly number[]): Promise<BenchLine> {
	const writer = createCopyWriter(pool, { now: Date.now });
	const plan = { limits: [{ tag: '', kind: 'high' as const, level: 'alert' as const, value: 9, limitId: 1 }], staleAfterS: 30 };
	const begin = Date.now() - 6 * 3_600_000;
	const ours: number[] = [];
	const reference: number[] = [];
	for (let round = 0; round < ROUNDS; round += 1) {
		const mine = readingsOf(siteId, tagIds, round * 2, begin);
		let started = performance.now();
		const states = new Map<number, ReturnType<typeof freshState>>();
		for (let start = 0; start < ROWS; start += BATCH) {
			const batch = mine.slice(start, start + BATCH);
			const latest = new Map<number, LatestUpdate>();
			for (const reading of batch) {
				const judged = judge(reading, plan, states.get(reading.tagId) ?? null, { now: Date.now() });
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
		ours.push((ROWS / (performance.now() - started)) * 1_000);

		const bare = readingsOf(siteId, tagIds, round * 2 + 1, begin);
		started = performance.now();
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
		reference.push((ROWS / (performance.now() - started)) * 1_000);
	}
	await writer.close();
	return benchLine(
		'ingest',
		ours,
		reference,
		'readings/s',
		`${ROUNDS} rounds of ${ROWS} readings of ${TAGS} tags in turn with bare COPY, a commit every ${BATCH}, fsync on`,
	);
}

/** Ours: the feed as NDJSON lines. Reference: psql's \copy of the same columns as delivered. */
async function feed(pool: Pool, url: string, siteId: number): Promise<BenchLine> {
	const ours: number[] = [];
	const reference: number[] = [];
	let delivered = 0;
	const folder = mkdtempSync(join(tmpdir(), 'millrace-bench-'));
	for (let round = 0; round < ROUNDS; round += 1) {
		let started = performance.now();
		const from = await resolveCursor(pool, siteId, '0');
		if (!from.ok) throw new Error(from.reason);
		const head = await readFeedHead(pool, siteId);
		let bytes = 0;
		for await (const chunk of feedLines(pool, { siteId, after: from.value.position, last: head.position, form: 'ndjson' }))
			bytes += chunk.length;
		delivered = head.position - from.value.position;
		if (bytes === 0) throw new Error('the feed was empty');
		ours.push((delivered / (performance.now() - started)) * 1_000);

		started = performance.now();
		const copied = spawnSync('psql', [
			url,
			'-q',
			'-c',
			`\\copy (SELECT t.name, to_char(r.at, 'YYYY-MM-DD"T"HH24:MI:SS.MS"Z"'), r.value, t.unit, r.quality FROM readings r JOIN tags t ON t.id = r.tag_id LIMIT ${delivered}) TO '${join(folder, 'out.csv')}' CSV`,
		]);
		if (copied.status !== 0) throw new Error(`psql failed: ${copied.stderr.toString()}`);
		reference.push((delivered / (performance.now() - started)) * 1_000);
	}
	rmSync(folder, { recursive: true, force: true });
	return benchLine(
		'feed',
		ours,
		reference,
		'readings/s',
		`${delivered} readings as NDJSON against psql \\copy of name, ISO time, value, unit, quality`,
	);
}

const asked = process.argv.slice(2);
const KNOWN = ['ingest', 'feed', 'trend-growth', 'packing', 'modbus', 'opcua', 'mqtt', 'freshness', 'pages'];
for (const name of asked)
	if (!KNOWN.includes(name)) throw new Refusal(`No benchmark is named "${name}". Known: ${KNOWN.join(', ')}.`);

const wants = (name: string) => asked.length === 0 || asked.includes(name);
const print = (line: BenchLine) => console.log(JSON.stringify(line));

if (['ingest', 'feed', 'trend-growth', 'packing', 'mqtt', 'freshness'].some(wants)) await storeBenches();
if (wants('modbus')) print(await benchModbus());
if (wants('opcua')) print(await benchOpcua());
if (wants('pages')) (await benchPages()).forEach(print);

async function storeBenches(): Promise<void> {
	const cluster = await createBenchCluster();
	try {
		await migrateDatabase(cluster.url, 'drizzle');
		const pool = createPool(cluster.url, { name: 'millrace-bench', max: 6, statementTimeoutMs: 0 });
		await ensurePartitionsAhead(pool, Date.now());
		const site = await pool.query<{ id: number }>("INSERT INTO sites (slug, name) VALUES ('bench', 'Bench') RETURNING id");
		const siteId = site.rows[0]?.id ?? 0;
		const tags = await pool.query<{ id: number }>(
			"INSERT INTO tags (site_id, name, unit, published_at) SELECT $1, 'TAG-' || n, 'mm/s', now() FROM generate_series(1, $2::int) AS n RETURNING id",
			[siteId, TAGS],
		);
		const tagIds = tags.rows.map((row) => row.id);
		if (wants('trend-growth')) print(await benchTrendGrowth(pool, tagIds[0] ?? 0));
		const ingested = wants('ingest') || wants('feed') ? await ingest(pool, siteId, tagIds) : null;
		if (wants('ingest') && ingested) print(ingested);
		if (wants('packing')) print(await benchPacking(pool, siteId, tagIds));
		if (wants('feed')) print(await feed(pool, cluster.url, siteId));
		if (wants('mqtt')) print(await benchMqtt(pool, siteId, tagIds.slice(0, 100)));
		if (wants('freshness')) print(await benchFreshness(pool, siteId));
		await pool.end();
	} finally {
		await cluster.remove();
	}
}
