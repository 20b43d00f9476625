import pg from 'pg';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { createCopyWriter, type CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { currentCursor, findBehind, readFeed, readFeedHead, resolveCursor } from '#lib/pipeline/store/find-feed.ts';
import { findLatest } from '#lib/pipeline/store/find-latest.ts';
import { findReadings } from '#lib/pipeline/store/find-readings.ts';
import { findTrend } from '#lib/pipeline/store/find-trend.ts';
import { dropExpired, ensurePartitionsAhead } from '#lib/pipeline/store/partitions.ts';
import type { LatestUpdate, TagAlarmChange } from '#lib/pipeline/store/write-batch.ts';
import { feedLines } from '#lib/pipeline/feeds/feed-lines.ts';
import { createFeedWatch } from '#lib/pipeline/feeds/feed.ts';
import { createFeedStream } from '#lib/pipeline/feeds/stream.ts';
import { cloneDatabase } from '../support/cluster.ts';
import { batchOf, siteWithTags, storedReading } from '../support/readings.ts';

let database: Awaited<ReturnType<typeof cloneDatabase>>;
let pool: Pool;
let writer: CopyWriter;
const now = Date.now();

beforeAll(async () => {
	database = await cloneDatabase();
	pool = createPool(database.url, { name: 'test', max: 12, statementTimeoutMs: 0 });
	writer = createCopyWriter(pool, { now: Date.now });
	await ensurePartitionsAhead(pool, now);
});
afterAll(async () => {
	await writer.close();
	await pool.end();
	await database.drop();
});

/** Everything in the feed after a position, a page at a time as a reader would. */
async function readAll(siteId: number, after: string, limit = 700) {
	const values: number[] = [];
	let cursor = after;
	for (;;) {
		const from = await resolveCursor(pool, siteId, cursor);
		if (!from.ok) throw new Error(from.reason);
		const page = await readFeed(pool, siteId, from.value, { limit });
		if (page.entries.length === 0) return { values, cursor: page.cursor };
		for (const entry of page.entries) if (entry.kind === 'reading') values.push(entry.value ?? Number.NaN);
		cursor = page.cursor;
	}
}

const latestOf = (tagId: number, at: number, value: number, extra: Partial<LatestUpdate> = {}): LatestUpdate => ({
	tagId,
	at,
	value,
	quality: 0,
	receivedAt: at,
	confirmedAt: at,
	isHubTime: false,
	sourceAt: null,
	reason: null,
	raw: null,
	wire: null,
	verdict: 'normal',
	isStale: false,
	revision: 1,
	resets: false,
	...extra,
});

describe('storing readings', () => {
	it('stores a batch and shows it in the feed once, in the order given', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 2);
		const cursor = await currentCursor(pool, siteId);
		const readings = Array.from({ length: 1_500 }, (_, i) => storedReading(siteId, tagIds[i % 2] ?? 0, now + i, i));
		expect(await writer.write(batchOf(readings))).toMatchObject({ stored: 1_500, duplicates: 0, deadLetters: 0 });
		expect((await readAll(siteId, cursor)).values).toEqual(readings.map((one) => one.value));
	});

	it('drops what is equal in tag, time, value and quality, within a batch and across, and keeps what differs in one', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const cursor = await currentCursor(pool, siteId);
		const one = storedReading(siteId, tag, now, 1);
		expect(await writer.write(batchOf([one, one, storedReading(siteId, tag, now, 2)]))).toMatchObject({
			stored: 2,
			duplicates: 1,
		});
		expect(
			await writer.write(
				batchOf([one, storedReading(siteId, tag, now, 1, { quality: 0x40950000 }), storedReading(siteId, tag, now, null)]),
			),
		).toMatchObject({ stored: 2, duplicates: 1 });
		expect(await writer.write(batchOf([storedReading(siteId, tag, now, null)]))).toMatchObject({ stored: 0, duplicates: 1 });
		expect((await readAll(siteId, cursor)).values).toHaveLength(4);
	});

	it('keeps every bit of a value and of a raw scalar', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const values = [0.1, 1 / 3, Number.MIN_VALUE, -Number.MAX_VALUE, 4.512579, 2 ** 53];
		await writer.write(
			batchOf(values.map((value, i) => storedReading(siteId, tagIds[0] ?? 0, now + i, value, { rawKept: 'a\\b\tc\nd' }))),
		);
		const rows = await findReadings(pool, tagIds[0] ?? 0, { from: null, to: null, order: 'oldest', limit: 100, after: null });
		expect(rows.map((row) => row.value)).toEqual(values);
		expect(rows[0]?.raw).toBe('a\\b\tc\nd');
	});

	it('makes the partition of a day that maintenance has not made, late or ahead', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const days = [now - 40 * 86_400_000, now - 200 * 86_400_000, now + 20 * 86_400_000];
		expect(await writer.write(batchOf(days.map((at, i) => storedReading(siteId, tagIds[0] ?? 0, at, i))))).toMatchObject({
			stored: 3,
		});
	});

	it('sets aside what is older than the retention or cannot be stored, and stores the rest', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const result = await writer.write(
			batchOf([
				storedReading(siteId, tag, now, 1),
				storedReading(siteId, tag, now - 401 * 86_400_000, 2),
				storedReading(siteId, tag, now + 1, Number.NaN),
				storedReading(siteId, tag, now + 2, 3, { rawKept: 'a\u0000b' }),
				storedReading(siteId, tag, 8.64e15, 4),
				storedReading(siteId, tag, now + 3, 5),
			]),
		);
		expect(result).toMatchObject({ stored: 2, deadLetters: 4 });
		const letters = await pool.query('SELECT reason FROM dead_letters WHERE tag_id = $1 ORDER BY id', [tag]);
		expect(letters.rows.map((row) => row.reason).sort()).toEqual([
			'not-a-number',
			'null-character',
			'older-than-retention',
			'time-out-of-range',
		]);
	});

	it('loses nothing and harms no later batch when its connection is killed in the middle', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const readings = Array.from({ length: 60_000 }, (_, i) => storedReading(siteId, tagIds[0] ?? 0, now + i, i));
		const writing = writer.write(batchOf(readings)).then(
			() => 'stored',
			() => 'refused',
		);
		const killer = new pg.Client({ connectionString: database.url });
		await killer.connect();
		await new Promise((resolve) => setTimeout(resolve, 60));
		await killer.query(
			"SELECT pg_terminate_backend(pid) FROM pg_stat_activity WHERE application_name = 'test' AND datname = current_database()",
		);
		await killer.end();
		const first = await writing;
		const result = await writer.write(batchOf(readings));
		expect(result.stored + result.duplicates).toBe(60_000);
		expect(result.duplicates).toBe(first === 'stored' ? 60_000 : 0);
	});
});

describe('the cursor never skips', () => {
	it('while one writer’s transaction is held open and others commit', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const start = await currentCursor(pool, siteId);
		const held = new pg.Client({ connectionString: database.url });
		await held.connect();
		await held.query('BEGIN');
		await held.query('SELECT txid_current()');
		await held.query("INSERT INTO settings (key, value) VALUES ('held', '1')");
		await writer.write(batchOf([storedReading(siteId, tag, now, 1)]));
		const first = await readAll(siteId, start);
		expect(first.values).toEqual([1]); // a long transaction elsewhere delays nobody
		await writer.write(batchOf([storedReading(siteId, tag, now + 1, 2)]));
		await held.query('COMMIT');
		await held.end();
		expect((await readAll(siteId, first.cursor)).values).toEqual([2]);
	});

	it('with a writer that has its position and has not committed: later ones wait for it, readers see neither', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		await writer.write(batchOf([storedReading(siteId, tagIds[0] ?? 0, now, 0)]));
		const start = await currentCursor(pool, siteId);
		const held = new pg.Client({ connectionString: database.url });
		await held.connect();
		await held.query('BEGIN');
		await held.query('UPDATE feed_heads SET position = position + 1 WHERE site_id = $1', [siteId]);
		const writing = writer.write(batchOf([storedReading(siteId, tagIds[0] ?? 0, now + 1, 2)]));
		await new Promise((resolve) => setTimeout(resolve, 100));
		expect((await readAll(siteId, start)).values).toEqual([]);
		await held.query('COMMIT');
		await held.end();
		await writing;
		expect((await readAll(siteId, start)).values).toEqual([2]);
	});

	it('with four writers against one reader for a minute', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 4);
		let cursor = await currentCursor(pool, siteId);
		const until = performance.now() + 60_000;
		let sent = 0;
		const write = async (lane: number) => {
			const own = createCopyWriter(pool, { now: Date.now });
			for (let n = 0; performance.now() < until;) {
				const size = 1 + ((n * 7 + lane * 13) % 40);
				const readings = Array.from({ length: size }, () =>
					storedReading(siteId, tagIds[lane] ?? 0, now + n, lane * 10_000_000 + n++),
				);
				await own.write(batchOf(readings));
				sent += size;
			}
			await own.close();
		};
		const seen = new Map<number, number>();
		let isDone = false;
		const read = async () => {
			for (;;) {
				const last = isDone;
				const page = await readAll(siteId, cursor, 100);
				cursor = page.cursor;
				for (const value of page.values) seen.set(value, (seen.get(value) ?? 0) + 1);
				if (last && page.values.length === 0) return;
			}
		};
		const reading = read();
		await Promise.all([0, 1, 2, 3].map(write));
		isDone = true;
		await reading;
		expect(seen.size).toBe(sent);
		expect([...seen.values()].every((count) => count === 1)).toBe(true);
		expect(sent).toBeGreaterThan(1_000);
	}, 240_000);

	it('moves on past what a filter hides', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 2);
		const from = await resolveCursor(pool, siteId, undefined);
		if (!from.ok) throw new Error(from.reason);
		await writer.write(batchOf(Array.from({ length: 50 }, (_, i) => storedReading(siteId, tagIds[0] ?? 0, now + i, i))));
		const page = await readFeed(pool, siteId, from.value, { limit: 10, tagIds: new Set([tagIds[1] ?? 0]) });
		expect(page.entries).toEqual([]);
		expect(await findBehind(pool, siteId, page.position)).toEqual({ seconds: 0, readings: 0 });
	});

	it('says gone for another epoch, for a place ahead and for what is none', async () => {
		const { siteId } = await siteWithTags(pool, 1);
		expect(await resolveCursor(pool, siteId, 'ffffffff.0')).toMatchObject({ ok: false, reason: 'cursor-gone' });
		const cursor = await currentCursor(pool, siteId);
		expect(await resolveCursor(pool, siteId, `${cursor.split('.')[0]}.99`)).toMatchObject({ ok: false, reason: 'cursor-gone' });
		expect(await resolveCursor(pool, siteId, 'x')).toMatchObject({ ok: false, reason: 'not-a-cursor' });
	});

	it('says gone for a place that retention has taken, and 0 begins at the oldest kept', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const old = createCopyWriter(pool, { now: () => now - 20 * 86_400_000 });
		const start = await currentCursor(pool, siteId);
		await old.write(batchOf([storedReading(siteId, tag, now, 1)]));
		await old.close();
		await writer.write(batchOf([storedReading(siteId, tag, now + 1, 2)]));
		expect((await readAll(siteId, '0')).values).toEqual([1, 2]);
		expect(await dropExpired(pool, now)).toBeGreaterThan(0);
		expect(await resolveCursor(pool, siteId, start)).toMatchObject({ ok: false, reason: 'cursor-gone' });
		expect((await readAll(siteId, '0')).values).toEqual([2]);
	});

	it('a bell wakes a waiting reader within 100 ms of the commit', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const watch = createFeedWatch(pool);
		try {
			await new Promise((resolve) => setTimeout(resolve, 300));
			await writer.write(batchOf([storedReading(siteId, tagIds[0] ?? 0, now, 1)]));
			await new Promise((resolve) => setTimeout(resolve, 200));
			const from = await resolveCursor(pool, siteId, undefined);
			if (!from.ok) throw new Error(from.reason);
			const waiting = watch.waitPast(siteId, from.value.position, 5_000);
			await writer.write(batchOf([storedReading(siteId, tagIds[0] ?? 0, now + 1, 2)]));
			const committed = performance.now();
			await waiting;
			expect(performance.now() - committed).toBeLessThan(500); // the look of once a second would come later
		} finally {
			await watch.close();
		}
	});
});

describe('readers of the feed', () => {
	it('get as lines what they get a page at a time, whole commits or parts of them, filtered or not', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 2);
		const [a = 0, b = 0] = tagIds;
		for (let n = 0; n < 30; n += 1)
			await writer.write(
				batchOf(Array.from({ length: 7 }, (_, i) => storedReading(siteId, i % 2 ? a : b, now + n * 10 + i, n * 10 + i))),
			);
		const head = await readFeedHead(pool, siteId);
		const linesOf = async (after: number, last: number, tags?: ReadonlySet<number>) => {
			let text = '';
			for await (const chunk of feedLines(pool, { siteId, after, last, tagIds: tags, form: 'ndjson' }))
				text += Buffer.from(chunk).toString();
			return text
				.split('\n')
				.filter(Boolean)
				.map((line) => JSON.parse(line) as { value: number; tag_id: number });
		};
		const all = (await readAll(siteId, '0')).values;
		expect((await linesOf(0, head.position)).map((line) => line.value)).toEqual(all);
		// From the middle of one commit to the middle of another.
		expect((await linesOf(3, head.position - 3)).map((line) => line.value)).toEqual(all.slice(3, -3));
		const own = await linesOf(0, head.position, new Set([a]));
		expect(own).toHaveLength(90);
		expect(own.every((line) => line.tag_id === a)).toBe(true);
	});

	it('two hundred open streams at one place each get every reading, and cost the database a few looks', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const own = createPool(database.url, { name: 'streams', max: 4 });
		const watch = createFeedWatch(own);
		const stop = new AbortController();
		try {
			let looks = 0;
			const query = own.query.bind(own) as (...args: unknown[]) => unknown;
			own.query = ((...args: unknown[]) => {
				if (String(args[0]).includes('feed_journal')) looks += 1;
				return query(...args);
			}) as typeof own.query;
			const from = await resolveCursor(pool, siteId, undefined);
			if (!from.ok) throw new Error(from.reason);
			const place = from.value;
			const readers = Array.from({ length: 200 }, async () => {
				const stream = createFeedStream(own, watch, { siteId, from: place, signal: AbortSignal.any([stop.signal]) });
				const values: number[] = [];
				let text = '';
				for await (const chunk of stream as unknown as AsyncIterable<Uint8Array>) {
					text += Buffer.from(chunk).toString();
					const events = text.split('\n\n');
					text = events.pop() ?? '';
					for (const event of events) {
						const data = /^data: (.*)$/m.exec(event)?.[1];
						if (data) for (const item of (JSON.parse(data) as { items: { value: number }[] }).items) values.push(item.value);
					}
					if (values.length >= 50) break;
				}
				return values;
			});
			for (let n = 0; n < 5; n += 1) {
				await new Promise((resolve) => setTimeout(resolve, 150));
				await writer.write(
					batchOf(Array.from({ length: 10 }, (_, i) => storedReading(siteId, tagIds[0] ?? 0, now + n * 10 + i, n * 10 + i))),
				);
			}
			const expected = Array.from({ length: 50 }, (_, i) => i);
			for (const values of await Promise.all(readers)) expect(values).toEqual(expected);
			expect(looks).toBeLessThan(100); // a look a stream and commit would be a thousand
		} finally {
			stop.abort();
			await watch.close();
			await own.end();
		}
	});
});

describe('latest values', () => {
	it('move only forward in time, whatever order they come in, unless a wrong stamp is given up', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const value = async () => (await findLatest(pool, siteId, { names: null, afterId: 0, limit: 10 })).rows[0]?.value;
		await writer.write(batchOf([], { latest: [latestOf(tag, now + 10, 2), latestOf(tag, now, 1)] }));
		expect(await value()).toBe(2);
		await writer.write(batchOf([], { latest: [latestOf(tag, now + 5, 9)] }));
		expect(await value()).toBe(2);
		await writer.write(batchOf([], { latest: [latestOf(tag, now + 6, 7, { resets: true })] }));
		expect(await value()).toBe(7);
	});

	it('wait for initial data before the first reading, and their cursor misses nothing that follows', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const before = await findLatest(pool, siteId, { names: ['t1'], afterId: 0, limit: 10 });
		expect(before.rows).toMatchObject([{ tag: 'T1', value: null, quality: 0x80320000, verdict: 'unknown', at: null }]);
		await writer.write(batchOf([storedReading(siteId, tagIds[0] ?? 0, now, 5)]));
		expect((await readAll(siteId, before.cursor)).values).toEqual([5]);
	});
});

describe('alarms', () => {
	const change = (tagId: number, siteId: number, extra: Partial<TagAlarmChange>): TagAlarmChange => ({
		tagId,
		siteId,
		kind: 'raised',
		direction: 'up',
		limitKind: 'high',
		level: 'alert',
		levelNow: 'alert',
		at: now,
		raisedAt: now,
		value: 5,
		isUncertain: false,
		limitId: 0,
		isLate: false,
		isTest: false,
		...extra,
	});

	it('are one excursion that escalates, steps down and clears in place, and writing it again changes nothing', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const changes = [
			change(tag, siteId, {}),
			change(tag, siteId, { kind: 'escalated', level: 'danger', levelNow: 'danger', at: now + 1 }),
			change(tag, siteId, { kind: 'stepped-down', level: 'danger', levelNow: 'alert', at: now + 2 }),
			change(tag, siteId, { kind: 'cleared', level: 'danger', levelNow: null, at: now + 3 }),
		];
		await writer.write(batchOf([], { alarmChanges: changes }));
		await writer.write(batchOf([], { alarmChanges: changes }));
		const found = await pool.query('SELECT id, level, level_now, raised_at, cleared_at FROM alarms WHERE tag_id = $1', [tag]);
		expect(found.rows).toMatchObject([
			{ level: 'danger', level_now: null, raised_at: new Date(now), cleared_at: new Date(now + 3) },
		]);
		const events = await pool.query('SELECT kind FROM alarm_events WHERE alarm_id = $1 ORDER BY id', [found.rows[0].id]);
		expect(events.rows.map((row) => row.kind)).toEqual(['raised', 'escalated', 'stepped-down', 'cleared']);
	});

	it('found behind live data are recorded closed with their whole span, beside one that is open and was raised later', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		await writer.write(batchOf([], { alarmChanges: [change(tag, siteId, { at: now + 100, raisedAt: now + 100 })] }));
		const found = change(tag, siteId, { kind: 'found', isLate: true, levelNow: null, raisedAt: now, at: now + 5 });
		await writer.write(batchOf([], { alarmChanges: [found] }));
		await writer.write(batchOf([], { alarmChanges: [found] }));
		const rows = await pool.query('SELECT is_late, raised_at, cleared_at FROM alarms WHERE tag_id = $1 ORDER BY raised_at', [
			tag,
		]);
		expect(rows.rows).toEqual([
			{ is_late: true, raised_at: new Date(now), cleared_at: new Date(now + 5) },
			{ is_late: false, raised_at: new Date(now + 100), cleared_at: null },
		]);
	});

	it('found behind live data that touch one on record are a part of it and no second', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		await writer.write(batchOf([], { alarmChanges: [change(tag, siteId, { at: now + 100, raisedAt: now + 100 })] }));
		const found = { kind: 'found', isLate: true, levelNow: null } as const;
		await writer.write(
			batchOf([], {
				alarmChanges: [
					change(tag, siteId, { ...found, raisedAt: now + 90, at: now + 110 }),
					change(tag, siteId, { ...found, raisedAt: now + 150, at: now + 160 }),
					change(tag, siteId, { ...found, direction: 'down', raisedAt: now + 150, at: now + 160 }),
				],
			}),
		);
		const rows = await pool.query('SELECT direction, is_late FROM alarms WHERE tag_id = $1 ORDER BY raised_at', [tag]);
		expect(rows.rows).toEqual([
			{ direction: 'up', is_late: false },
			{ direction: 'down', is_late: true },
		]);
	});
});

describe('a trend', () => {
	it('has the extremes and the mean by time of each bucket, and a gap stays a gap [worked by hand]', async () => {
		const { siteId, tagIds } = await siteWithTags(pool, 1);
		const tag = tagIds[0] ?? 0;
		const t0 = Math.floor(now / 60_000) * 60_000 - 3_600_000;
		const at = (second: number, value: number | null) => storedReading(siteId, tag, t0 + second * 1_000, value);
		// 2 for 15 s, 6 for 45 s: mean 5 by time, 4 by count.
		await writer.write(batchOf([at(0, 2), at(15, 6), at(180, 1), at(190, null)]));
		const { buckets, widthS } = await findTrend(pool, tag, t0, t0 + 600_000, 11);
		expect(widthS).toBe(60);
		expect(buckets).toEqual([
			{ at: t0, min: 2, max: 6, mean: 5, n: 2, worst: 0 },
			{ at: t0 + 180_000, min: 1, max: 1, mean: 1, n: 2, worst: 0x808c0000 },
		]);
	});
});
