import { afterAll, beforeAll, expect, it } from 'vitest';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { readConfig } from '#lib/server/config.ts';
import { rawToStore, rebuildRaw } from '#lib/pipeline/normalize/raw-to-store.ts';
import { createCopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { ensureJournalDay, ensureReadingDay } from '#lib/pipeline/store/partitions.ts';
import type { StoredReading } from '#lib/pipeline/store/write-batch.ts';
import { createPlant } from '#simulators/scenario/plant.ts';
import { DEMO_SEED } from '#simulators/scenario/seed.ts';
import { layDemo } from '../../src/cli/lay-demo.ts';
import { loadPlans } from '../../src/collector/load-plans.ts';
import { cloneDatabase } from '../support/cluster.ts';
import { DAY_MS, packWhole } from '../support/packing.ts';
import { batchOf } from '../support/readings.ts';

let database: Awaited<ReturnType<typeof cloneDatabase>>;
let pool: Pool;
const HOURS = 6;
const day = Math.floor(Date.now() / DAY_MS) * DAY_MS - 9 * DAY_MS;

beforeAll(async () => {
	database = await cloneDatabase();
	pool = createPool(database.url, { name: 'test', max: 4, statementTimeoutMs: 0 });
	await layDemo(database.url, readConfig({}));
}, 120_000);
afterAll(async () => {
	await pool.end();
	await database.drop();
});

let state = 1;
/** A whole number below `most`, without a pattern that packing could use: the linear congruence of ANSI C's example. */
function drawn(most: number): number {
	state = (Math.imul(state, 1_103_515_245) + 12_345) & 0x7fffffff;
	return (state >>> 8) % most;
}

/** Every signal of the demo over some hours, in the steps of its raw type; receipts lag by a part of a second that is never the same. */
async function layHours(): Promise<number> {
	const sources = await pool.query<{ id: string }>('SELECT id FROM sources');
	const loaded = await loadPlans(
		pool,
		sources.rows.map((row) => row.id),
	);
	const plant = createPlant(DEMO_SEED);
	const writer = createCopyWriter(pool, { now: Date.now });
	let readings: StoredReading[] = [];
	let stored = 0;
	for (const plan of loaded.flatMap((source) => source.plans)) {
		const signal = plant.signal(plan.tag);
		if (!signal) continue;
		let last = day - 1;
		for (let at = day; at < day + HOURS * 3_600_000; at += signal.periodMs) {
			const { value: measured, measuredAt, status } = plant.read(signal.path, at);
			if (measured === null || status !== 'good' || measuredAt <= last) continue;
			last = measuredAt;
			const { factor, offset } = plan.conversion;
			const raw = rebuildRaw(measured * factor + offset, plan);
			const value = (raw * plan.scale + plan.offset) * factor + offset;
			// A message is there in milliseconds; what is polled each second waits for up to one.
			const lag = signal.periodMs < 10_000 ? 1 + drawn(12) : 30 + drawn(900);
			readings.push({
				siteId: plan.siteId,
				tagId: plan.tagId,
				at: measuredAt,
				value,
				quality: 0,
				timeFrom: 'source',
				receivedAt: measuredAt + lag,
				sourceAt: null,
				reason: null,
				raw,
				rawKept: rawToStore(raw, value, plan),
				wire: null,
				revision: plan.revision,
			});
		}
		if (readings.length < 20_000) continue;
		stored += (await writer.write(batchOf(readings))).stored;
		readings = [];
	}
	stored += (await writer.write(batchOf(readings))).stored;
	await writer.close();
	return stored;
}

it('readings of the demo’s signals take 10 bytes each at most, with indexes, when they are packed', async () => {
	await ensureReadingDay(pool, day);
	await ensureJournalDay(pool, Date.now());
	const stored = await layHours();
	expect(stored).toBeGreaterThan(400_000);
	expect(await packWhole(pool, day)).toBe(stored);
	const sizes = await pool.query<{ bytes: number }>(
		"SELECT sum(pg_total_relation_size(oid)) AS bytes FROM pg_class WHERE relkind = 'r' AND relname ~ '^reading_blocks_g'",
	);
	const each = Number(sizes.rows[0]?.bytes) / stored;
	expect(each).toBeLessThan(10);
	// What the page of the store says of that day is what the disk says, within a tenth.
	const said = await pool.query<{ each: number }>('SELECT bytes::float8 / readings AS each FROM packed_days');
	expect(Math.abs((said.rows[0]?.each ?? 0) - each)).toBeLessThan(each / 10);
	console.info(`packed: ${each.toFixed(2)} bytes a reading`);
}, 120_000);
