import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { setTestValue } from '#lib/server/test-values/set-test-value.ts';
import { cloneDatabase } from '../support/cluster.ts';
import { actor, CollectingSite, pause, until, type Collector } from '../support/collecting-site.ts';
import { sampleOf, type ScriptedDevice } from '../support/scripted-source.ts';

const NO_COMMUNICATION = 0x80310000; // BadNoCommunication [OPC 10000-4 §7.39.2]
const LAST_USABLE = 0x40900000; // UncertainLastUsableValue [OPC 10000-4 §7.39.2]
const LOCAL_OVERRIDE = 0x00960000; // GoodLocalOverride [OPC 10000-4 §7.39.2]

let database: Awaited<ReturnType<typeof cloneDatabase>>;
let site: CollectingSite;
let device: ScriptedDevice;
let lost: { id: string; device: ScriptedDevice };
let collector: Collector;
let ids: Record<string, number>;
const id = (tag: string) => ids[tag] ?? 0;

const running = () => until('the sources run', () => device.isConnected && lost.device.isConnected);

beforeAll(async () => {
	database = await cloneDatabase();
	site = await CollectingSite.lay(database.url);
	({ device } = await site.addSource('press line'));
	lost = await site.addSource('far tank');
	await site.publish(
		'press line',
		{ tag: 'delayed' },
		{ tag: 'quiet', stale_after_s: 0.8 },
		{ tag: 'tested' },
		{ tag: 'unchanged' },
		{ tag: 'buffered' },
	);
	ids = await site.publish('far tank', { tag: 'first', stale_after_s: 1.2 }, { tag: 'second', stale_after_s: 1.8 });
	await site.limit(
		{ tag: 'delayed', kind: 'high', level: 'alert', value: 7, deadband: 0.5, raise_after_s: 30 },
		{ tag: 'quiet', kind: 'stale', level: 'alert' },
		{ tag: 'first', kind: 'stale', level: 'alert' },
		{ tag: 'second', kind: 'stale', level: 'alert' },
		{ tag: 'tested', kind: 'high', level: 'alert', value: 7 },
		{ tag: 'unchanged', kind: 'high', level: 'alert', value: 7 },
		{ tag: 'buffered', kind: 'high', level: 'alert', value: 7, raise_after_s: 15 },
	);
	collector = await site.start('folder/main');
	await running();
});
afterAll(async () => {
	await site.end();
	await database.drop();
});

describe('a source that is lost', () => {
	it('raises one connection alarm, tells each silence once, holds its stale alarms back, and clears when values come back', async () => {
		const cursor = await site.cursor();
		const at = Date.now();
		await lost.device.send(sampleOf(id('first'), 5, at), sampleOf(id('second'), 6, at));
		lost.device.lose();
		const alarm = await until('both stale alarms are counted', async () => {
			const open = await site.alarms(lost.id);
			return open[0]?.suppressed_count === 2 && open[0];
		});
		expect(alarm).toMatchObject({ direction: 'connection', level: 'alert', cleared_at: null });
		await until('both silences are told', async () => (await site.fed(cursor, id('second'))).length === 2);
		expect(await site.fed(cursor, id('first'))).toEqual([5, null]);
		expect(await site.fed(cursor, id('second'))).toEqual([6, null]);
		expect((await site.readings(id('first'))).at(-1)).toMatchObject({ value: null, quality: NO_COMMUNICATION });
		const latest = await until('latest', async () => {
			const row = await site.latest('first');
			return row?.isStale && row;
		});
		expect(latest).toMatchObject({ at, value: 5, quality: LAST_USABLE, verdict: 'unknown', reason: 'stale' });
		await pause(1_200);
		expect(await site.fed(cursor, id('first'))).toEqual([5, null]);
		expect(await site.alarms(lost.id)).toHaveLength(1);
		expect(await site.alarms(id('first'))).toEqual([]);

		lost.device.recover();
		await until('it is connected again', () => lost.device.isConnected, 8_000);
		// The first comes back with the very value and time it had: a source that reports changes has nothing newer to say.
		await lost.device.send(sampleOf(id('first'), 5, at), sampleOf(id('second'), 7));
		await until('the alarm is cleared', async () => (await site.alarms(lost.id))[0]?.cleared_at);
		expect(await site.fed(cursor, id('first'))).toEqual([5, null, 5]);
		expect(await site.fed(cursor, id('second'))).toEqual([6, null, 7]);
		await until('latest', async () => {
			const row = await site.latest('first');
			return row && !row.isStale && row.quality === 0 && row.value === 5;
		});
		await until('both events are told', async () => (await site.feed(cursor)).filter((one) => one.kind === 'event').length === 2);
		const events = (await site.feed(cursor)).flatMap((one) => (one.kind === 'event' ? [one.event.event] : []));
		expect(events).toEqual(['source-lost', 'source-back']);
		expect(await site.alarms(id('first'))).toEqual([]);
	});

	it('that comes back without one of its tags raises the stale alarm that was held back', async () => {
		const keep = setInterval(() => lost.device.isConnected && void lost.device.send(sampleOf(id('first'), Math.random())), 200);
		try {
			await lost.device.send(sampleOf(id('second'), 8));
			await pause(300);
			clearInterval(keep);
			lost.device.lose();
			await until('the source is lost', async () => (await site.alarms(lost.id))[1]?.suppressed_count === 2);
			lost.device.recover();
			await until('it is connected again', () => lost.device.isConnected, 8_000);
			const again = setInterval(
				() => lost.device.isConnected && void lost.device.send(sampleOf(id('first'), Math.random())),
				200,
			);
			try {
				const alarms = await until('its stale alarm', async () => {
					const found = await site.alarms(id('second'));
					return found.length > 0 && found;
				});
				expect(alarms).toMatchObject([{ direction: 'stale', cleared_at: null }]);
				expect(await site.alarms(id('first'))).toEqual([]);
				await lost.device.send(sampleOf(id('second'), 9));
				await until('it clears with the next value', async () => (await site.alarms(id('second')))[0]?.cleared_at);
			} finally {
				clearInterval(again);
			}
		} finally {
			clearInterval(keep);
		}
	});
});

describe('a tag that falls silent while its source is fine', () => {
	it('raises its stale alarm, also before its first value, and ends it with the next value or a confirmation', async () => {
		const cursor = await site.cursor();
		const keep = setInterval(() => void device.send(sampleOf(id('tested'), 1)), 200);
		try {
			await until('the stale alarm of a tag that never spoke', async () => (await site.alarms(id('quiet'))).length === 1);
			await device.send(sampleOf(id('quiet'), 3));
			expect((await site.alarms(id('quiet')))[0]?.cleared_at).not.toBeNull();
			await until('the stale alarm', async () => (await site.alarms(id('quiet'))).length === 2);
			expect((await site.alarms(id('quiet')))[1]).toMatchObject({ direction: 'stale', cleared_at: null });
			expect(await site.fed(cursor, id('quiet'))).toEqual([3, null]);
			const latest = await until('latest', async () => {
				const row = await site.latest('quiet');
				return row?.isStale && row.value !== null && row;
			});
			expect(latest).toMatchObject({ value: 3, quality: LAST_USABLE });
			// The source says that the last value still stands.
			await device.send(sampleOf(id('quiet'), 0, null, { raw: null, confirms: true }));
			await until('it clears', async () => (await site.alarms(id('quiet')))[1]?.cleared_at);
			expect(await site.fed(cursor, id('quiet'))).toEqual([3, null, 3]);
			const connection = await site.pool.query("SELECT 1 FROM alarms WHERE direction = 'connection' AND source_id <> $1", [
				lost.id,
			]);
			expect(connection.rowCount).toBe(0);
		} finally {
			clearInterval(keep);
		}
	});
});

describe('a test value', () => {
	it('stands beside the true value, is marked, raises alarms of its own, and ends by itself', async () => {
		const cursor = await site.cursor();
		const caller = { siteId: site.siteId, actor, ip: null };
		const countBefore = (await site.values(id('tested'))).length;
		expect(await setTestValue(site.pool, { tag: 'tested', value: 9, seconds: 2.5 }, caller)).toMatchObject({ ok: true });
		const alarm = await until('the test alarm', async () => (await site.alarms(id('tested')))[0]);
		expect(alarm).toMatchObject({ direction: 'up', is_test: true, cleared_at: null });
		await device.send(sampleOf(id('tested'), 2.25));
		const latest = await until('the true value beside it', async () => {
			const row = await site.latest('tested');
			return row?.trueValue === 2.25 && row;
		});
		expect(latest).toMatchObject({ value: 9, isTest: true, quality: LOCAL_OVERRIDE, reason: 'test-value', verdict: 'normal' });
		const entries = (await site.feed(cursor)).filter((one) => one.kind === 'reading' && one.tagId === id('tested'));
		expect(entries.filter((one) => one.kind === 'reading' && one.isTest)).toMatchObject([{ value: 9, quality: LOCAL_OVERRIDE }]);
		expect((await site.values(id('tested'))).slice(countBefore)).toEqual([2.25]);
		const apart = await site.pool.query('SELECT value FROM test_readings WHERE tag_id = $1', [id('tested')]);
		expect(apart.rows).toEqual([{ value: 9 }]);
		await until('it ends', async () => (await site.latest('tested'))?.isTest === false);
		expect(await site.latest('tested')).toMatchObject({ value: 2.25, quality: 0 });
		await until('its alarm clears', async () => (await site.alarms(id('tested')))[0]?.cleared_at);
		expect(await site.alarms(id('tested'))).toHaveLength(1);
	});

	it('that runs out while no collector lives leaves no alarm open', async () => {
		const caller = { siteId: site.siteId, actor, ip: null };
		await setTestValue(site.pool, { tag: 'tested', value: 9, seconds: 1.5 }, caller);
		await until('the test alarm', async () => (await site.alarms(id('tested'))).length === 2);
		await collector.stop();
		await pause(1_000);
		collector = await site.start('folder/main');
		await running();
		await until('the alarm clears', async () => (await site.alarms(id('tested')))[1]?.cleared_at, 3_000);
	});
});

describe('a restart', () => {
	it('in the middle of a raise delay neither loses nor doubles the alarm, nor does another afterwards', async () => {
		// Readings of the last minute that the device sends in order: the condition holds from the first on.
		const start = Date.now() - 60_000;
		await device.send(sampleOf(id('delayed'), 8, start));
		await device.send(sampleOf(id('delayed'), 8.1, start + 20_000));
		expect(await site.alarms(id('delayed'))).toEqual([]);
		await collector.stop();
		collector = await site.start('folder/main');
		await running();
		await device.send(sampleOf(id('delayed'), 8.2, start + 29_000));
		expect(await site.alarms(id('delayed'))).toEqual([]);
		await device.send(sampleOf(id('delayed'), 8.3, start + 30_000));
		expect(await site.alarms(id('delayed'))).toMatchObject([
			{ direction: 'up', raised_at: new Date(start + 30_000), cleared_at: null },
		]);
		await collector.stop();
		collector = await site.start('folder/main');
		await running();
		await device.send(sampleOf(id('delayed'), 8.3, start + 30_000), sampleOf(id('delayed'), 8.4, start + 31_000));
		expect(await site.alarms(id('delayed'))).toHaveLength(1);
		await device.send(sampleOf(id('delayed'), 6.4, start + 32_000));
		expect((await site.alarms(id('delayed'))).map((one) => one.cleared_at?.getTime())).toEqual([start + 32_000]);
	});

	it('after which the source says its unchanged value again stores nothing twice and raises nothing twice', async () => {
		const at = Date.now();
		await device.send(sampleOf(id('unchanged'), 9, at));
		await collector.stop();
		collector = await site.start('folder/main');
		await running();
		const before = collector.pipeline.counts.duplicates;
		await device.send(sampleOf(id('unchanged'), 9, at));
		expect(collector.pipeline.counts.duplicates - before).toBe(1);
		expect(await site.values(id('unchanged'))).toEqual([9]);
		expect(await site.alarms(id('unchanged'))).toMatchObject([{ raised_at: new Date(at), cleared_at: null }]);
	});
});

describe('readings that a sensor buffered and that arrive behind live ones', () => {
	it('one by one are one stretch: an excursion that its delay lets through is recorded closed, with its whole span', async () => {
		const start = Date.now() - 120_000;
		await device.send(sampleOf(id('buffered'), 3));
		// 20 s above the limit with a delay of 15 s: judged one by one no reading would raise it.
		for (const [second, value] of [
			[0, 8],
			[10, 8.1],
			[20, 8.2],
			[30, 8],
			[40, 3],
		] as const)
			await device.send(sampleOf(id('buffered'), value, start + second * 1_000));
		expect(await site.alarms(id('buffered'))).toEqual([]);
		await collector.stop();
		expect(await site.alarms(id('buffered'))).toMatchObject([
			{ direction: 'up', level: 'alert', raised_at: new Date(start + 20_000), cleared_at: new Date(start + 40_000) },
		]);
		collector = await site.start('folder/main');
		await running();
	});
});
