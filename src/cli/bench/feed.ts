// Edge: cli. May touch: the store, the feed's lines, psql. The feed as NDJSON against psql's own copy.
import { spawnSync } from 'node:child_process';
import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { feedLines } from '#lib/pipeline/feeds/feed-lines.ts';
import { createCopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { readFeedHead, resolveCursor } from '#lib/pipeline/store/find-feed.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { ROWS, writeRound } from './ingest.ts';
import { benchLine, type BenchLine } from './line.ts';

const ROUNDS = 5;
const READINGS = 1_000_000;

/** Lays what is missing to a million readings in the feed. */
async function fill(pool: Pool, siteId: number, tagIds: readonly number[]): Promise<void> {
	const writer = createCopyWriter(pool, { now: Date.now });
	const { position } = await readFeedHead(pool, siteId);
	const begin = Date.now() - 20 * 3_600_000;
	for (let have = position, round = 0; have < READINGS; have += ROWS, round += 1)
		await writeRound(writer, siteId, tagIds, round, begin);
	await writer.close();
}

/** Ours: the feed as NDJSON lines. Reference: psql's \copy of the same columns as delivered. */
export async function benchFeed(pool: Pool, url: string, siteId: number, tagIds: readonly number[]): Promise<BenchLine> {
	await fill(pool, siteId, tagIds);
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
