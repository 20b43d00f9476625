import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { cloneDatabase } from '../support/cluster.ts';
import { CollectingSite, until, type Collector } from '../support/collecting-site.ts';
import { sampleOf, type ScriptedDevice } from '../support/scripted-source.ts';

let database: Awaited<ReturnType<typeof cloneDatabase>>;
let site: CollectingSite;
let device: ScriptedDevice;
let sourceId: string;
let second: { id: string; device: ScriptedDevice };
let collector: Collector;
let ids: Record<string, number>;
const id = (tag: string) => ids[tag] ?? 0;

beforeAll(async () => {
	database = await cloneDatabase();
	site = await CollectingSite.lay(database.url);
	({ id: sourceId, device } = await site.addSource('press line'));
	second = await site.addSource('compressor house');
	ids = await site.publish(
		'press line',
		{ tag: 'plain' },
		{ tag: 'steady' },
		{ tag: 'twice' },
		{ tag: 'late' },
		{ tag: 'banded', deadband: 0.5 },
		{ tag: 'changes', deadband: 0 },
		{ tag: 'polled', expected_every_s: 2 },
	);
	collector = await site.start();
	await until('the sources run', () => device.asked.length > 0 && second.device.asked.length > 0);
});
afterAll(async () => {
	await site.end();
	await database.drop();
});

describe('what a source hands over', () => {
	it('arrives in readings, in latest and in the feed, each value once', async () => {
		const cursor = await site.cursor();
		const at = Date.now() - 10;
		expect(await device.send(sampleOf(id('plain'), 4.512579, at), sampleOf(id('plain'), 4.6, at + 1))).toBe('stored');
		expect(await site.readings(id('plain'))).toEqual([
			{ at, value: 4.512579, quality: 0 },
			{ at: at + 1, value: 4.6, quality: 0 },
		]);
		expect(await site.fed(cursor, id('plain'))).toEqual([4.512579, 4.6]);
		const latest = await until('latest', async () => {
			const row = await site.latest('plain');
			return row?.value === 4.6 && row;
		});
		expect(latest).toMatchObject({ at: at + 1, quality: 0, isHubTime: false, isStale: false, verdict: 'normal' });
	});

	it('is dropped and counted where it equals the last in time, value and quality, and renews freshness', async () => {
		const cursor = await site.cursor();
		const at = Date.now();
		await device.send(sampleOf(id('twice'), 1, at));
		const tag = collector.pipeline.tags.get(id('twice'));
		const aliveBefore = tag?.aliveMono ?? 0;
		const before = collector.pipeline.counts.duplicates;
		await device.send(sampleOf(id('twice'), 1, at));
		await device.send(sampleOf(id('twice'), 1, at));
		expect(await site.values(id('twice'))).toEqual([1]);
		expect(await site.fed(cursor, id('twice'))).toEqual([1]);
		expect(collector.pipeline.counts.duplicates - before).toBe(2);
		expect(tag?.aliveMono).toBeGreaterThan(aliveBefore);
		await until('the source counts them', async () => {
			const health = await site.pool.query('SELECT duplicates FROM source_health WHERE source_id = $1', [sourceId]);
			return health.rows[0]?.duplicates === 2;
		});
	});

	it('is stored and fed when it comes behind newer values, and latest does not go back', async () => {
		await site.limit({ tag: 'late', kind: 'high', level: 'alert', value: 7 });
		await until('the limit is taken up', () => collector.pipeline.tags.get(id('late'))?.plan.limits.length === 1);
		const cursor = await site.cursor();
		const at = Date.now();
		await device.send(sampleOf(id('late'), 1, at));
		await device.send(sampleOf(id('late'), 9, at - 60_000));
		await device.send(sampleOf(id('late'), 2, at + 1));
		expect(await site.fed(cursor, id('late'))).toEqual([1, 9, 2]);
		expect(await site.values(id('late'))).toEqual([9, 1, 2]);
		await until('latest', async () => (await site.latest('late'))?.value === 2);
		// Found afterwards: recorded as late and closed, so that nobody is called.
		// A late stretch is judged when none has come for ten seconds.
		const alarms = await until(
			'the alarm found afterwards',
			async () => {
				const found = await site.pool.query('SELECT is_late, cleared_at IS NOT NULL AS closed FROM alarms WHERE tag_id = $1', [
					id('late'),
				]);
				return found.rows.length > 0 ? found.rows : null;
			},
			20_000,
		);
		expect(alarms).toEqual([{ is_late: true, closed: true }]);
		expect((await site.latest('late'))?.verdict).toBe('normal');
	});

	it('goes into history only past the deadband, while latest follows every value', async () => {
		const at = Date.now();
		for (const [i, value] of [10, 10.3, 10.5, 10.6, 10.2].entries()) await device.send(sampleOf(id('banded'), value, at + i));
		// Strictly more than the deadband from the last stored value [OPC 10000-4 §7.22.2].
		expect(await site.values(id('banded'))).toEqual([10, 10.6]);
		await until('latest', async () => (await site.latest('banded'))?.value === 10.2);
	});

	it('is stored again after ten minutes without a change, and at once when only its quality changes', async () => {
		const start = Date.now() - 3_600_000;
		await device.send(sampleOf(id('changes'), 5, start));
		await device.send(sampleOf(id('changes'), 5, start + 300_000));
		await device.send(sampleOf(id('changes'), 5, start + 599_999));
		await device.send(sampleOf(id('changes'), 5, start + 600_000));
		await device.send(sampleOf(id('changes'), 5, start + 600_001, { sourceQuality: 0x40000000 }));
		expect((await site.readings(id('changes'))).map((row) => [row.at - start, row.quality])).toEqual([
			[0, 0],
			[600_000, 0],
			[600_001, 0x40000000],
		]);
	});

	it('is the same measurement while a slow sensor has not measured again, and another once its time has passed', async () => {
		const at = Date.now() - 10_000;
		const poll = (value: number, after: number) => device.send(sampleOf(id('polled'), value, null, { receivedAt: at + after }));
		await poll(3, 0);
		await poll(3, 500);
		await poll(3, 1_900);
		expect(await site.values(id('polled'))).toEqual([3]);
		await poll(3, 2_000);
		await poll(4, 2_100);
		await poll(4, 2_200);
		expect((await site.readings(id('polled'))).map((row) => [row.at - at, row.value])).toEqual([
			[0, 3],
			[2_000, 3],
			[2_100, 4],
		]);
	});
});

describe('a published revision', () => {
	it('is taken up within 2 s, and a tag that did not change loses no sample', async () => {
		const cursor = await site.cursor();
		let sent = 0;
		const sending = setInterval(() => {
			sent += 1;
			void device.send(sampleOf(id('steady'), sent));
		}, 10);
		const opens = device.opens;
		try {
			await until('values flow', () => sent > 20);
			ids = await site.publish('press line', { tag: 'added' });
			await until('the new tag is asked for', () => device.asked.at(-1)?.some((one) => one.key === id('added')), 2_000);
			await device.send(sampleOf(id('added'), 1));
			await site.publishRows({ tag: 'plain', scale: 10 });
			await until('the new scale is taken up', () => collector.pipeline.tags.get(id('plain'))?.plan.scale === 10, 2_000);
			await site.publishRows({ tag: 'added', delete: true });
			await until('the removed tag is let go', () => !collector.pipeline.tags.has(id('added')), 2_000);
		} finally {
			clearInterval(sending);
		}
		await device.send(sampleOf(id('steady'), -1));
		expect(device.opens).toBe(opens);
		expect(await site.values(id('steady'))).toHaveLength(sent + 1);
		expect(await site.fed(cursor, id('steady'))).toEqual([...Array.from({ length: sent }, (_, i) => i + 1), -1]);
		await device.send(sampleOf(id('plain'), 0.5));
		expect((await site.values(id('plain'))).at(-1)).toBe(5);
		expect(await site.values(id('added'))).toEqual([1]);
	});

	it('that moves a tag to another source lets the other source feed it, with its history', async () => {
		ids = await site.publish('press line', { tag: 'moving' });
		await until('it is asked for', () => device.asked.at(-1)?.some((one) => one.key === id('moving')));
		await device.send(sampleOf(id('moving'), 1));
		for (const [name, target, from] of [
			['compressor house', second.device, device],
			['press line', device, second.device],
		] as const) {
			await site.publishRows({ tag: 'moving', source: name });
			await until('the other source asks for it', () => target.asked.at(-1)?.some((one) => one.key === id('moving')));
			await until('the source before lets it go', () => !from.asked.at(-1)?.some((one) => one.key === id('moving')));
			await target.send(sampleOf(id('moving'), 2));
		}
		expect(await site.values(id('moving'))).toEqual([1, 2, 2]);
	});
});

describe('a changed source setting', () => {
	it('restarts that source and no other', async () => {
		const { id: changed, device: other } = second;
		const opens = device.opens;
		await site.pool.query('UPDATE sources SET version = version + 1 WHERE id = $1', [changed]);
		await until('it is opened again', () => other.opens === 2 && other.isConnected, 3_000);
		expect(other.standing).toBe(1);
		expect(device.opens).toBe(opens);
		await site.pool.query('UPDATE sources SET enabled = false, version = version + 1 WHERE id = $1', [changed]);
		await until('switched off, it is let go', () => other.standing === 0, 5_000);
		expect(device.standing).toBe(1);
	});
});
