import fc from 'fast-check';
import pg from 'pg';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { createPacking } from '../../src/collector/packing.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { createCopyWriter, type CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { currentCursor, readFeed, resolveCursor } from '#lib/pipeline/store/find-feed.ts';
import { STATUS_CODES } from '#lib/domain/quality.ts';
import { findReadings, type ReadingKey } from '#lib/pipeline/store/find-readings.ts';
import { findTrace } from '#lib/pipeline/store/find-trace.ts';
import { findTrend } from '#lib/pipeline/store/find-trend.ts';
import { packDay } from '#lib/pipeline/store/pack-day.ts';
import { ensurePartitionsAhead } from '#lib/pipeline/store/partitions.ts';
import type { StoredReading } from '#lib/pipeline/store/write-batch.ts';
import { cloneDatabase } from '../support/cluster.ts';
import { DAY_MS, dayOf, everything, packLateWhole, packWhole } from '../support/packing.ts';
import { batchOf, siteWithTags, storedReading } from '../support/readings.ts';

let database: Awaited<ReturnType<typeof cloneDatabase>>;
let pool: Pool;
let writer: CopyWriter;
const midnight = Math.floor(Date.now() / DAY_MS) * DAY_MS;
/** Days are packed oldest first; each test takes the next. */
let nextDay = midnight - 390 * DAY_MS;
const takeDay = () => (nextDay += DAY_MS);

beforeAll(async () => {
	database = await cloneDatabase();
	pool = createPool(database.url, { name: 'test', max: 12, statementTimeoutMs: 0 });
	writer = createCopyWriter(pool, { now: Date.now });
	await ensurePartitionsAhead(pool, Date.now());
});
afterAll(async () => {
	await writer.close();
	await pool.end();
	await database.drop();
});

/** Readings of one tag at even steps over a day. */
const steady = (siteId: number, tagId: number, day: number, stepMs: number, from = 0, to = DAY_MS): StoredReading[] => {
	const readings: StoredReading[] = [];
	for (let ms = from; ms < to; ms += stepMs) readings.push(storedReading(siteId, tagId, day + ms, 850 + Math.sin(ms) * 20));
	return readings;
};

describe('what is packed', () => {
	it('comes back in every column and bit, whatever the values, times, qualities and the rest', async () => {
		const value = fc.oneof(
			fc.double({ noNaN: true, noDefaultInfinity: true }),
			fc.constantFrom(
				0,
				-0,
				Number.MIN_VALUE,
				-Number.MIN_VALUE,
				2.2e-308,
				1.2e-38,
				1e-40,
				Number.MAX_VALUE,
				-Number.MAX_VALUE,
				2 ** 53 + 2,
				// A million times this is no number any more.
				-1.797693134862316e302,
				null,
			),
			fc.integer({ min: -40_000, max: 40_000 }).map((n) => n * 0.1),
			fc.integer({ min: 800_000_000, max: 900_000_000 }).map((n) => n / 1_000_003),
			fc.float({ noNaN: true, noDefaultInfinity: true }),
		);
		const reading = fc.record({
			tag: fc.nat(1),
			ms: fc.oneof(
				fc.nat(DAY_MS - 1),
				fc.nat(50).map((n) => n * 1_000),
				fc.nat(200),
			),
			value,
			quality: fc.constantFrom(...Object.values(STATUS_CODES)),
			lag: fc.oneof(fc.nat(100), fc.integer({ min: -40_000, max: 40_000 }), fc.integer({ min: -5e9, max: 5e9 })),
			timeFrom: fc.constantFrom('hub' as const, 'source' as const),
			revision: fc.constantFrom(1, 1, 1, 2, 900),
			sourceAt: fc.option(fc.integer({ min: 0, max: 4e12 })),
			// Whatever text a later version may give.
			reason: fc.option(
				fc.constantFrom('', 'range', 'NULL', 'a,b{}"\\c') as fc.Arbitrary<string> as fc.Arbitrary<
					Exclude<StoredReading['reason'], null>
				>,
			),
			rawKept: fc.option(
				fc.oneof(
					fc.constantFrom('', '65535', 'null', '{"a":[1]}\n'),
					fc.string().map((text) => text.replaceAll('\u0000', '')),
				),
			),
		});
		await fc.assert(
			fc.asyncProperty(fc.array(reading, { minLength: 1, maxLength: 60 }), async (drawn) => {
				const { siteId, tagIds } = await siteWithTags(pool, 2);
				const day = takeDay();
				await writer.write(
					batchOf(
						drawn.map(({ tag, ms, lag, ...rest }) =>
							storedReading(siteId, tagIds[tag] ?? 0, day + ms, rest.value, { ...rest, receivedAt: day + ms + lag }),
						),
					),
				);
				const before = await everything(pool, tagIds);
				expect(before.length).toBeGreaterThan(0);
				await packWhole(pool, day);
				expect(
					(await pool.query('SELECT count(*)::int AS n FROM reading_blocks WHERE tag_id = ANY($1)', [tagIds])).rows[0].n,
				).toBeGreaterThan(0);
				await pool.query('SELECT drop_packed_days()');
				expect(await everything(pool, tagIds)).toEqual(before);
			}),
			{ numRuns: 150 },
		);
	}, 120_000);

	it('is one row a tag and hour, and the rows are gone by dropping their table', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const day = takeDay();
		await writer.write(batchOf(steady(siteId, tagIds[0] ?? 0, day, 10_000)));
		expect(await packWhole(pool, day)).toBe(8_640);
		await pool.query('SELECT drop_packed_days()');
		expect(
			(await pool.query('SELECT count(*)::int AS n, sum(n)::int AS readings FROM reading_blocks WHERE tag_id = $1', [tagIds[0]]))
				.rows,
		).toEqual([{ n: 24, readings: 8_640 }]);
		expect(
			(await pool.query('SELECT to_regclass($1) AS name', [`readings_${dayOf(day).replaceAll('-', '')}`])).rows[0].name,
		).toBeNull();
	});
});

describe('answers do not tell packed days from others', () => {
	it('in pages of both orders, also when a day is packed between two pages', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const days = [takeDay(), takeDay(), takeDay()];
		const readings = days.flatMap((day, n) => steady(siteId, tag, day, 600_000 * (n + 1), 1_234));
		// Several at one time: the cursor stands between them.
		for (const extra of [null, 3, 4]) readings.push(storedReading(siteId, tag, (days[1] ?? 0) + 1_234, extra));
		await writer.write(batchOf(readings));
		const pages = async (order: 'oldest' | 'newest', between: () => Promise<unknown>) => {
			const rows: ReadingKey[] = [];
			let after: ReadingKey | null = null;
			for (let n = 0; n < 60; n += 1) {
				const page: ReadingKey[] = await findReadings(pool, tag, {
					from: (days[0] ?? 0) + 5_000_000,
					to: null,
					order,
					limit: 7,
					after,
				});
				rows.push(...page.map(({ at, value, quality }) => ({ at, value, quality })));
				if (page.length < 7) return rows;
				after = page.at(-1) ?? null;
				if (n === 9) await between();
			}
			throw new Error('the pages do not end');
		};
		const all = await pages('oldest', () => Promise.resolve());
		expect(all).toHaveLength(readings.filter((one) => one.at >= (days[0] ?? 0) + 5_000_000).length);
		expect(await pages('oldest', () => packWhole(pool, days[0] ?? 0))).toEqual(all);
		expect(await pages('newest', () => packWhole(pool, days[1] ?? 0))).toEqual(all.toReversed());
		await packWhole(pool, days[2] ?? 0);
		await pool.query('SELECT drop_packed_days()');
		expect(await pages('oldest', () => Promise.resolve())).toEqual(all);
		expect(await pages('newest', () => Promise.resolve())).toEqual(all.toReversed());
	});

	it('in trends and traces', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const day = takeDay();
		await writer.write(batchOf(steady(siteId, tag, day, 30_000, 3_600_000, 7_200_000)));
		const ask = async () => [
			await findTrend(pool, tag, day, day + DAY_MS, 300),
			await findTrace(pool, tag, day + 3_600_000),
			await findTrace(pool, tag, day + 5_000_001),
			await findTrace(pool, tag, day + DAY_MS),
			await findTrace(pool, tag, day + 3_599_999),
		];
		const before = await ask();
		expect(before[4]).toBeNull();
		expect(before[2]).toMatchObject({ at: day + 4_980_000 });
		await packWhole(pool, day);
		await pool.query('SELECT drop_packed_days()');
		expect(await ask()).toEqual(before);
	});

	it('and leave out packed readings in a former unit, with pages as long as they are asked for', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const day = takeDay();
		await writer.write(
			batchOf(steady(siteId, tag, day, 60_000).map((reading, i) => ({ ...reading, revision: i % 2 === 0 && i < 1_000 ? 1 : 2 }))),
		);
		await pool.query('UPDATE tags SET unit_revision = 2 WHERE id = $1', [tag]);
		const ask = (order: 'oldest' | 'newest') => findReadings(pool, tag, { from: day, to: null, order, limit: 600, after: null });
		const before = [await ask('oldest'), await ask('newest')];
		expect(before.map((rows) => rows.length)).toEqual([600, 600]);
		await packWhole(pool, day);
		expect([await ask('oldest'), await ask('newest')]).toEqual(before);
	});

	it('a day is read from the blocks of that day alone', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 3);
		const days = Array.from({ length: 9 }, takeDay);
		for (const day of days) {
			await writer.write(batchOf(tagIds.flatMap((tag) => steady(siteId, tag, day, 300_000))));
			await packWhole(pool, day);
		}
		await pool.query('SELECT drop_packed_days()');
		await pool.query('ANALYZE reading_blocks');
		const from = new Date(days[4] ?? 0).toISOString();
		const to = new Date(days[5] ?? 0).toISOString();
		const plan = await pool.query(
			`EXPLAIN (ANALYZE, FORMAT JSON) SELECT at, value FROM reading_history WHERE tag_id = $1 AND at >= $2 AND at < $3
				AND hour >= date_trunc('hour', $2::timestamptz, 'UTC') AND hour < $3 ORDER BY at`,
			[tagIds[1], from, to],
		);
		interface Node {
			'Relation Name'?: string;
			'Actual Rows': number;
			'Actual Loops': number;
			'Rows Removed by Filter'?: number;
			Plans?: Node[];
		}
		const touched: { name: string; rows: number }[] = [];
		const walk = (node: Node) => {
			const name = node['Relation Name'];
			if (name && node['Actual Loops'] > 0 && name !== 'packing_state')
				touched.push({ name, rows: node['Actual Rows'] * node['Actual Loops'] });
			for (const child of node.Plans ?? []) walk(child);
		};
		walk(plan.rows[0]['QUERY PLAN'][0].Plan);
		const blocks = touched.filter(({ name }) => name.startsWith('reading_blocks'));
		expect(blocks).toHaveLength(1); // the week's table
		expect(blocks[0]?.rows).toBe(24); // one block an hour, of one tag
		expect(touched.filter(({ name }) => !name.startsWith('reading_blocks')).every(({ rows }) => rows === 0)).toBe(true);
	});
});

describe('readings for a day that is packed', () => {
	it('are known as duplicates where they are stored already, and stored and fed once where they are new', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const day = takeDay();
		const readings = [
			...steady(siteId, tag, day, 60_000),
			storedReading(siteId, tag, day + 1, null),
			storedReading(siteId, tag, day + 2, -0),
		];
		await writer.write(batchOf(readings));
		await packWhole(pool, day);
		await pool.query('SELECT drop_packed_days()');
		const cursor = await currentCursor(pool, siteId);
		expect(await writer.write(batchOf(readings))).toMatchObject({ stored: 0, duplicates: readings.length, deadLetters: 0 });
		const late = [
			storedReading(siteId, tag, day + 500, 1),
			storedReading(siteId, tag, day, 2),
			storedReading(siteId, tag, day + 60_000, readings[1]?.value ?? 0, { quality: 0x40950000 }),
			storedReading(siteId, tag, day + 500, 1),
		];
		const mixed = [...late, storedReading(siteId, tag, Date.now(), 5), ...readings.slice(0, 50)];
		expect(await writer.write(batchOf(mixed))).toMatchObject({ stored: 4, duplicates: 51 });
		expect(await writer.write(batchOf(late))).toMatchObject({ stored: 0, duplicates: 4 });
		const before = await everything(pool, tagIds);
		expect(before).toHaveLength(readings.length + 4);
		expect(await packLateWhole(pool)).toBe(1);
		expect((await pool.query('SELECT count(*)::int AS n FROM late_readings WHERE tag_id = $1', [tag])).rows[0].n).toBe(0);
		expect(await everything(pool, tagIds)).toEqual(before);
		expect(await writer.write(batchOf(mixed))).toMatchObject({ stored: 0, duplicates: mixed.length });
		const place = await resolveCursor(pool, siteId, cursor);
		if (!place.ok) throw new Error(place.reason);
		expect((await readFeed(pool, siteId, place.value, { limit: 1_000 })).entries).toHaveLength(4);
	});

	it('are stored, too, for a day and tag that had none', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const day = midnight - 395 * DAY_MS;
		expect(await writer.write(batchOf([storedReading(siteId, tagIds[0] ?? 0, day + 5, 1)]))).toMatchObject({ stored: 1 });
		expect(await packLateWhole(pool)).toBe(1);
		expect(await everything(pool, tagIds)).toHaveLength(1);
	});

	it('cost nothing where all are fresh: the packing state is not even looked at', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const holder = await pool.connect();
		await holder.query('BEGIN');
		await holder.query('LOCK TABLE packing_state IN ACCESS EXCLUSIVE MODE');
		try {
			await writer.write(
				batchOf([
					storedReading(siteId, tagIds[0] ?? 0, Date.now(), 1),
					storedReading(siteId, tagIds[0] ?? 0, Date.now() - DAY_MS, 1),
				]),
			);
		} finally {
			await holder.query('ROLLBACK');
			holder.release();
		}
	});

	it('are found by the writer even where its clock is wrong', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const day = takeDay();
		await writer.write(batchOf(steady(siteId, tagIds[0] ?? 0, day, 3_600_000)));
		await packWhole(pool, day);
		await pool.query('SELECT drop_packed_days()');
		const behind = createCopyWriter(pool, { now: () => day + DAY_MS });
		expect(
			await behind.write(
				batchOf([...steady(siteId, tagIds[0] ?? 0, day, 3_600_000), storedReading(siteId, tagIds[0] ?? 0, day + 9, 9)]),
			),
		).toMatchObject({
			stored: 1,
			duplicates: 24,
		});
		await behind.close();
	});
});

describe('packing that is watched, cut off or shared', () => {
	it('shows every reading once at every moment, and a snapshot from before still after', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 40);
		const day = takeDay();
		for (let part = 0; part < tagIds.length; part += 10)
			await writer.write(batchOf(tagIds.slice(part, part + 10).flatMap((tag) => steady(siteId, tag, day, 60_000))));
		const total = 40 * 1_440;
		const count = 'SELECT count(*)::int AS n FROM reading_history WHERE tag_id = ANY($1)';
		const old = await pool.connect();
		await old.query('BEGIN ISOLATION LEVEL REPEATABLE READ');
		await old.query('SELECT 1');
		const seen = new Set<number>();
		let isPacking = true;
		const watch = async () => {
			while (isPacking) seen.add((await pool.query<{ n: number }>(count, [tagIds])).rows[0]?.n ?? -1);
		};
		const watching = [watch(), watch()];
		expect(await packWhole(pool, day)).toBe(total);
		isPacking = false;
		await Promise.all(watching);
		// Its table stays while somebody may still read it.
		expect((await pool.query('SELECT drop_packed_days() AS n')).rows[0].n).toBe(0);
		expect((await old.query(count, [tagIds])).rows[0].n).toBe(total);
		await old.query('COMMIT');
		old.release();
		expect((await pool.query('SELECT drop_packed_days() AS n')).rows[0].n).toBe(1);
		seen.add((await pool.query(count, [tagIds])).rows[0].n);
		expect([...seen]).toEqual([total]);
	});

	it('goes on after it was killed in the middle; what came meanwhile is stored and known', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 30);
		const day = takeDay();
		await writer.write(batchOf(tagIds.flatMap((tag) => steady(siteId, tag, day, 240_000))));
		const packer = createPool(database.url, { name: 'packer', max: 2, statementTimeoutMs: 0 });
		const owner = new pg.Client({ connectionString: database.url });
		await owner.connect();
		const before = await everything(pool, tagIds);
		const running = packDay(packer, dayOf(day), { signal: new AbortController().signal, rest: 20 }).then(
			() => 'done',
			() => 'killed',
		);
		const state = async () =>
			(await pool.query<{ done_tag: number }>('SELECT done_tag FROM packing_state')).rows[0]?.done_tag ?? 0;
		for (let tries = 0; (await state()) === 0 && tries < 200; tries += 1) await new Promise((resolve) => setTimeout(resolve, 10));
		for (let tries = 0; tries < 200; tries += 1) {
			await owner.query(
				"SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE application_name = 'packer' AND datname = current_database()",
			);
			const ended = await Promise.race([running, new Promise((resolve) => setTimeout(() => resolve(null), 20))]);
			if (ended) break;
		}
		await owner.end();
		expect(await running).toBe('killed');
		await packer.end();
		expect(await state()).toBeGreaterThan(0);
		expect(await everything(pool, tagIds)).toEqual(before);
		const again = steady(siteId, tagIds[0] ?? 0, day, 240_000);
		expect(await writer.write(batchOf([...again, storedReading(siteId, tagIds[0] ?? 0, day + 7, 7)]))).toMatchObject({
			stored: 1,
			duplicates: again.length,
		});
		const between = await everything(pool, tagIds);
		expect(between).toHaveLength(before.length + 1);
		expect(await packWhole(pool, day)).toBe(before.length);
		expect(await everything(pool, tagIds)).toEqual(between);
		await packLateWhole(pool);
		expect(await everything(pool, tagIds)).toEqual(between);
	});

	it('waits for a writer that looked before the day was closed', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const day = takeDay();
		await writer.write(batchOf(steady(siteId, tagIds[0] ?? 0, day, 3_600_000)));
		const slow = await pool.connect();
		await slow.query('BEGIN');
		await slow.query('SELECT closed_until FROM packing_state FOR SHARE');
		const packing = packWhole(pool, day);
		await new Promise((resolve) => setTimeout(resolve, 100));
		await slow.query(
			'INSERT INTO readings (tag_id, at, value, quality, received_at, is_hub_time, revision) VALUES ($1, $2, 7, 0, $2, false, 1)',
			[tagIds[0], new Date(day + 77).toISOString()],
		);
		await slow.query('COMMIT');
		slow.release();
		expect(await packing).toBe(25);
		expect(await everything(pool, tagIds)).toHaveLength(25);
	});

	it('is done by one collector at a time, for the days older than the setting says, oldest first', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const days = [midnight - 9 * DAY_MS, midnight - 8 * DAY_MS, midnight - 6 * DAY_MS];
		for (const day of days) await writer.write(batchOf(steady(siteId, tagIds[0] ?? 0, day, 3_600_000)));
		const before = await everything(pool, tagIds);
		const holder = await pool.connect();
		await holder.query('SELECT pg_advisory_lock(7261405)');
		const packing = createPacking(pool, () => midnight + 3_600_000, 0);
		await packing.run();
		expect((await pool.query('SELECT count(*)::int AS n FROM reading_blocks WHERE tag_id = $1', [tagIds[0]])).rows[0].n).toBe(0);
		await holder.query('SELECT pg_advisory_unlock(7261405)');
		holder.release();
		await packing.run();
		packing.stop();
		const state = await pool.query('SELECT packed_until, error, finished_at FROM packing_state');
		// Seven days are rows: the eighth day before today is packed, the sixth is not.
		expect(state.rows[0]).toMatchObject({
			packed_until: new Date(midnight - 7 * DAY_MS),
			error: null,
			finished_at: expect.any(Date),
		});
		expect((await pool.query('SELECT count(*)::int AS n FROM reading_blocks WHERE tag_id = $1', [tagIds[0]])).rows[0].n).toBe(48);
		expect(await everything(pool, tagIds)).toEqual(before);
	});
});
