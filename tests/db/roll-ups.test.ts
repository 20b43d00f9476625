import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { rollUp, type RollUp } from '#lib/pipeline/aggregate/roll-up.ts';
import type { Point } from '#lib/pipeline/aggregate/part13.ts';
import { createCopyWriter, type CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { findTrend } from '#lib/pipeline/store/find-trend.ts';
import { dropExpired, ensurePartitionsAhead } from '#lib/pipeline/store/partitions.ts';
import { mergeStretches, rollUpSites } from '#lib/pipeline/store/roll-up-job.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { cloneDatabase } from '../support/cluster.ts';
import { batchOf, siteWithTags, storedReading } from '../support/readings.ts';

let database: Awaited<ReturnType<typeof cloneDatabase>>;
let pool: Pool;
let writer: CopyWriter;
const HOUR = 3_600_000;
const now = Date.now();
/** Begin of the stretch: an hour's bound, some hours ago. */
const t0 = Math.floor(now / HOUR) * HOUR - 5 * HOUR;

beforeAll(async () => {
	database = await cloneDatabase();
	pool = createPool(database.url, { name: 'test', max: 6, statementTimeoutMs: 0 });
	writer = createCopyWriter(pool, { now: Date.now });
	await ensurePartitionsAhead(pool, now);
});
afterAll(async () => {
	await writer.close();
	await pool.end();
	await database.drop();
});

async function rollAll(at = now): Promise<void> {
	for (let steps = 0; await rollUpSites(pool, at); steps += 1) if (steps > 50) throw new Error('the roll-ups never end');
}

async function rowsOf(table: 'rollups_minute' | 'rollups_hour', tagId: number): Promise<RollUp[]> {
	const found = await pool.query<Record<string, number> & { bucket: Date }>(
		`SELECT bucket, n, good_n, min, max, area, covered_s, last, worst FROM ${table} WHERE tag_id = $1 ORDER BY bucket`,
		[tagId],
	);
	return found.rows.map((row) => ({
		bucket: row.bucket.getTime(),
		n: row.n ?? 0,
		goodN: row.good_n ?? 0,
		min: row.min ?? null,
		max: row.max ?? null,
		area: row.area ?? 0,
		coveredS: row.covered_s ?? 0,
		last: row.last ?? null,
		worst: (row.worst ?? 0) >>> 0,
	}));
}

function expectSame(found: readonly RollUp[], expected: readonly RollUp[]): void {
	expect(found.map(({ area: _a, coveredS: _c, ...row }) => row)).toEqual(
		expected.map(({ area: _a, coveredS: _c, ...row }) => row),
	);
	found.forEach((row, index) => {
		expect(row.coveredS).toBeCloseTo(expected[index]?.coveredS ?? Number.NaN, 6);
		expect(row.area).toBeCloseTo(expected[index]?.area ?? Number.NaN, 5);
	});
}

/** Numbers that look like chance and are the same each time. */
function chance(seed: number): () => number {
	let state = seed;
	return () => (state = (Math.imul(state, 1_664_525) + 1_013_904_223) >>> 0) / 2 ** 32;
}

/** Four hours of readings from a second to minutes apart, with losses, uncertain values and silences. */
function series(seed: number): Point[] {
	const next = chance(seed);
	const points: Point[] = [];
	for (let at = t0; at < t0 + 4 * HOUR;) {
		const dice = next();
		const quality = dice < 0.05 ? 0x80310000 : dice < 0.1 ? 0x40a40000 : 0;
		points.push({ at, value: quality >>> 30 === 2 ? null : Math.round(next() * 1_000) / 8, quality });
		at += Math.round(1_000 + next() * (dice > 0.97 ? 1_500_000 : 60_000));
	}
	return points;
}

const reading = (siteId: number, tagId: number, point: Point) =>
	storedReading(siteId, tagId, point.at, point.value, { quality: point.quality });

describe('roll-ups', () => {
	it.each([
		['polled', "'modbus'", '{}', false],
		['reported on change', "'mqtt'", '{}', true],
		['polled with a deadband', "'modbus'", '{"deadband": 0}', true],
	] as const)(
		'of a %s tag are those made from scratch, after late, doubled and shuffled readings',
		async (_, kind, row, stepped) => {
			const { siteId, tagIds } = await siteWithTags(pool, 1);
			const tagId = tagIds[0] ?? 0;
			const source = await pool.query<{ id: string }>(
				`INSERT INTO sources (site_id, name, kind, settings) VALUES ($1, 'S', ${kind}, '{}') RETURNING id`,
				[siteId],
			);
			await pool.query('UPDATE tags SET source_id = $2, row = $3 WHERE id = $1', [tagId, source.rows[0]?.id, row]);
			const points = series(7);
			const next = chance(11);
			const shuffled = [...points].map((point) => ({ point, key: next() })).sort((a, b) => a.key - b.key);
			// Ten commits in any order, the roll-ups made after each; some readings come twice.
			for (let part = 0; part < 10; part += 1) {
				const own = shuffled.filter((_one, index) => index % 10 === part || index % 37 === part).map(({ point }) => point);
				await writer.write(batchOf(own.map((point) => reading(siteId, tagId, point))));
				await rollAll();
			}
			expectSame(await rowsOf('rollups_minute', tagId), rollUp(points, 60_000, stepped));
			expectSame(await rowsOf('rollups_hour', tagId), rollUp(points, HOUR, stepped));
		},
	);

	it('of an hour that was open when its readings came are made when it closes', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tagId = tagIds[0] ?? 0;
		const points = Array.from({ length: 60 }, (_, minute) => ({ at: t0 + minute * 60_000, value: minute, quality: 0 }));
		const clock = t0 + 30 * 60_000;
		await writer.write(batchOf(points.slice(0, 30).map((point) => reading(siteId, tagId, point))));
		await rollAll(clock);
		expect(await rowsOf('rollups_hour', tagId)).toEqual([]);
		await writer.write(batchOf(points.slice(30).map((point) => reading(siteId, tagId, point))));
		await rollAll(t0 + HOUR - 1);
		expect(await rowsOf('rollups_hour', tagId)).toEqual([]);
		await rollAll(t0 + HOUR + 1_000);
		expectSame(await rowsOf('rollups_hour', tagId), rollUp(points, HOUR, true));
	});

	it('never hold two units: rows of the unit before stay apart, and a trend shows the unit that stands', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tagId = tagIds[0] ?? 0;
		await writer.write(batchOf([storedReading(siteId, tagId, t0 + 1_000, 1)]));
		await rollAll();
		await pool.query('UPDATE tags SET unit_revision = 2 WHERE id = $1', [tagId]);
		await writer.write(batchOf([storedReading(siteId, tagId, t0 + 2_000, 1_000, { revision: 2 })]));
		await rollAll();
		const trend = await findTrend(pool, tagId, t0, t0 + 4 * HOUR, 241);
		expect([trend.level, trend.buckets.map(({ min, max, n }) => [min, max, n])]).toEqual(['minute', [[1_000, 1_000, 1]]]);
	});

	it('leave test readings out', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tagId = tagIds[0] ?? 0;
		const test = { tagId, siteId, at: t0 + 5_000, value: 99, quality: 0x00960000 };
		await writer.write(batchOf([storedReading(siteId, tagId, t0, 1)], { testReadings: [test as never] }));
		await rollAll();
		expect(await rowsOf('rollups_minute', tagId)).toMatchObject([{ n: 1, max: 1 }]);
	});

	it('are made whole, day by day, where the journal no longer reaches back', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tagId = tagIds[0] ?? 0;
		const old = createCopyWriter(pool, { now: () => now - 20 * 86_400_000 });
		const points = series(3);
		await old.write(batchOf(points.map((point) => reading(siteId, tagId, point))));
		await old.close();
		await dropExpired(pool, now);
		await writer.write(batchOf([storedReading(siteId, tagId, t0 + 4.5 * HOUR, 5)]));
		await rollAll();
		expectSame(
			await rowsOf('rollups_minute', tagId),
			rollUp([...points, { at: t0 + 4.5 * HOUR, value: 5, quality: 0 }], 60_000, true),
		);
	});

	it('join stretches of one tag that meet, so that no bucket is made twice at once', () => {
		expect(
			mergeStretches([
				{ tagId: 2, from: 0, to: 5 },
				{ tagId: 1, from: 60, to: 120 },
				{ tagId: 1, from: 0, to: 60 },
				{ tagId: 1, from: 180, to: 240 },
			]),
		).toEqual([
			{ tagId: 1, from: 0, to: 120 },
			{ tagId: 1, from: 180, to: 240 },
			{ tagId: 2, from: 0, to: 5 },
		]);
	});
});

describe('a trend', () => {
	it('of wide buckets is the same from roll-ups as from readings, the live edge included', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 2);
		const [rolled = 0, other = 0] = tagIds;
		const points = series(5);
		await writer.write(batchOf(points.map((point) => reading(siteId, rolled, point))));
		await rollAll(t0 + 3 * HOUR + 20 * 60_000);
		// What came after the last step is in no roll-up that readers go by.
		const edge = [1, 2, 3].map((n) => ({ at: t0 + 4 * HOUR + n * 1_000, value: n, quality: 0 }));
		await writer.write(batchOf(edge.map((point) => reading(siteId, rolled, point))));
		const all = [...points, ...edge];
		for (const [count, level, width] of [
			[6, 'hour', HOUR],
			[50, 'minute', 600_000],
		] as const) {
			const trend = await findTrend(pool, rolled, t0, t0 + 5 * HOUR, count);
			expect([trend.level, trend.widthS * 1_000]).toEqual([level, width]);
			const expected = rollUp(all, width, true);
			expect(trend.buckets.map(({ at, min, max, n, worst }) => [at, min, max, n, worst])).toEqual(
				expected.map(({ bucket, min, max, n, worst }) => [bucket, min, max, n, worst]),
			);
			// The bucket that holds the edge is not over yet, and weighs what has passed.
			expected.slice(0, -1).forEach(({ area, coveredS }, i) => {
				if (coveredS > 0) expect(trend.buckets[i]?.mean).toBeCloseTo(area / coveredS, 4);
			});
		}
		expect((await findTrend(pool, other, t0, t0 + 5 * HOUR, 50)).buckets).toEqual([]);
	});

	it.each([
		// From memory: Nepal is 5 h 45 min ahead of UTC all year, Newfoundland 3 h 30 min or 2 h 30 min behind.
		['Asia/Kathmandu', -5.75, [24, 24, 24, 24]],
		['America/St_Johns', 0, null],
	] as const)('of days is cut at the midnights of the site in %s', async (zone, offsetHours, lengths) => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tagId = tagIds[0] ?? 0;
		const day = 24 * HOUR;
		const today = Math.floor(now / day) * day;
		// A reading a minute over six days, its value the count of minutes since the first.
		const first = today - 6 * day;
		const points = Array.from({ length: 6 * 1_440 }, (_, i) => ({ at: first + i * 60_000, value: i, quality: 0 }));
		await writer.write(batchOf(points.map((point) => reading(siteId, tagId, point))));
		const midnight = new Intl.DateTimeFormat('en-GB', { timeZone: zone, hour: '2-digit', minute: '2-digit', hourCycle: 'h23' });
		const ask = () => findTrend(pool, tagId, first, today, 8, zone);
		// Once from readings alone, once from roll-ups.
		const before = await ask();
		await rollAll();
		const after = await ask();
		expect(after.widthS).toBe(86_400);
		expect(after.buckets.map(({ at, n, min, max, worst }) => [at, n, min, max, worst])).toEqual(
			before.buckets.map(({ at, n, min, max, worst }) => [at, n, min, max, worst]),
		);
		after.buckets.forEach(({ mean }, i) => expect(mean).toBeCloseTo(before.buckets[i]?.mean ?? Number.NaN, 6));
		for (const [i, { at, min, max, n }] of after.buckets.entries()) {
			const end = after.buckets[i + 1]?.at ?? today;
			expect(midnight.format(at)).toBe('00:00');
			const own = points.filter((point) => point.at >= at && point.at < end);
			expect([min, max, n]).toEqual([own[0]?.value, own.at(-1)?.value, own.length]);
		}
		if (lengths) {
			const starts = after.buckets.map(({ at }) => at);
			expect(starts.slice(1, 5).map((at, i) => (at - (starts[i] ?? 0)) / HOUR)).toEqual(lengths);
			expect(starts[1]).toBe(first + day + offsetHours * HOUR);
		}
	});

	it.each([
		// Ten stands for 540 s, twenty for 60 s: (10 * 540 + 20 * 60) / 600 = 11.
		['reported on change', "'mqtt'", '{}', 11],
		// A line from 10 to 20 over 540 s, then 20 held: (15 * 540 + 20 * 60) / 600 = 15.5.
		['polled every five minutes', "'modbus'", '{"interval_ms": 300000}', 15.5],
	] as const)('of a value %s weighs the time between two minutes that hold a reading (by hand)', async (_, kind, row, mean) => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tagId = tagIds[0] ?? 0;
		const source = await pool.query<{ id: string }>(
			`INSERT INTO sources (site_id, name, kind, settings) VALUES ($1, 'S', ${kind}, '{}') RETURNING id`,
			[siteId],
		);
		await pool.query('UPDATE tags SET source_id = $2, row = $3 WHERE id = $1', [tagId, source.rows[0]?.id, row]);
		await writer.write(batchOf([storedReading(siteId, tagId, t0, 10), storedReading(siteId, tagId, t0 + 540_000, 20)]));
		const ask = async () => (await findTrend(pool, tagId, t0, t0 + 600_000 * 40, 41)).buckets[0];
		const before = await ask();
		await rollAll();
		expect((await ask())?.mean).toBeCloseTo(mean, 9);
		expect(await ask()).toEqual(before);
	});

	it('of a value that stands over the bound of a bucket counts on both sides of it', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tagId = tagIds[0] ?? 0;
		const source = await pool.query<{ id: string }>(
			`INSERT INTO sources (site_id, name, kind, settings) VALUES ($1, 'S', 'mqtt', '{}') RETURNING id`,
			[siteId],
		);
		await pool.query('UPDATE tags SET source_id = $2, row = $3 WHERE id = $1', [tagId, source.rows[0]?.id, '{}']);
		// 10 from 300 s to 900 s, then 20: the second ten minutes are (10 * 300 + 20 * 300) / 600 = 15.
		await writer.write(batchOf([storedReading(siteId, tagId, t0 + 300_000, 10), storedReading(siteId, tagId, t0 + 900_000, 20)]));
		await rollAll();
		const { buckets } = await findTrend(pool, tagId, t0, t0 + 600_000 * 40, 41);
		expect(buckets.map(({ at, mean }) => [at - t0, mean])).toEqual([
			[0, 10],
			[600_000, 15],
		]);
	});

	it('shows a reading that came just after the last step for a minute before it', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tagId = tagIds[0] ?? 0;
		await writer.write(batchOf([storedReading(siteId, tagId, t0, 1)]));
		await rollAll(t0 + 10 * 60_000);
		await writer.write(batchOf([storedReading(siteId, tagId, t0 + 10 * 60_000 - 50, 2)]));
		const trend = await findTrend(pool, tagId, t0, t0 + HOUR, 61);
		expect([trend.level, trend.buckets.map(({ max }) => max)]).toEqual(['minute', [1, 2]]);
	});
});
