import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { createCopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { ensureJournalDay, ensureReadingDay } from '#lib/pipeline/store/partitions.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { createApp, type App } from '../support/app.ts';
import { layPlant, layTag, type Plant } from '../support/plant.ts';
import { batchOf, storedReading } from '../support/readings.ts';

let app: App;
let plant: Plant;
let pool: Pool;
let tagId: number;
const at = '/api/v1/sites/saltmere';
const MINUTE = 60_000;
const end = Math.floor(Date.now() / MINUTE) * MINUTE;
const begin = end - 2 * 86_400_000;

beforeAll(async () => {
	app = await createApp();
	plant = await layPlant(app.sql);
	tagId = await layTag(app.sql, plant.siteId, 'FAN.DE.V', { band_low_hz: 10, band_high_hz: 1_000, interval_ms: 60_000 });
	await layTag(app.sql, plant.siteId, 'NEW.V', { band_low_hz: 10, band_high_hz: 1_000 });
	await layTag(app.sql, plant.otherSiteId, 'ELSEWHERE');
	const machine = await app.sql.query<{ id: number }>(
		`INSERT INTO machines (site_id, name, data) VALUES ($1, 'FAN', '{"power_kw": 315, "speed_rpm": 1485, "foundation": "rigid"}') RETURNING id`,
		[plant.siteId],
	);
	await app.sql.query("UPDATE tags SET machine_id = $1 WHERE name IN ('FAN.DE.V', 'NEW.V')", [machine.rows[0]?.id]);
	pool = createPool(process.env.DATABASE_URL ?? '', { name: 'test', max: 2 });
	await ensureJournalDay(pool, Date.now());
	for (let day = begin; day <= end + 86_400_000; day += 86_400_000) await ensureReadingDay(pool, day);
	const writer = createCopyWriter(pool, { now: Date.now });
	// Two days of a minute each: 2.005 and 2.205 in turn, mean 2.105; for ten minutes of each day 9.0, which an alarm covers.
	const readings = Array.from({ length: 2 * 1_440 }, (_, n) =>
		storedReading(plant.siteId, tagId, begin + n * MINUTE, n % 1_440 < 10 ? 9 : n % 2 ? 2.205 : 2.005),
	);
	await writer.write(batchOf(readings));
	await writer.close();
	for (const day of [0, 1])
		await app.sql.query(
			`INSERT INTO alarms (site_id, tag_id, direction, kind, level, raised_value, raised_at, cleared_at) VALUES ($1, $2, 'up', 'high', 'alert', 9, $3, $4)`,
			[plant.siteId, tagId, new Date(begin + day * 86_400_000), new Date(begin + day * 86_400_000 + 10 * MINUTE)],
		);
}, 60_000);
afterAll(async () => {
	await pool.end();
	await app.close();
});

interface Proposed {
	limits: { tag: string; kind: string; level: string; value: number; origin: string; note: string }[];
	items: { tag: string; limits: number; reasons: string[] }[];
}
const propose = async (json: object, key = plant.keys.all) => app.ask(`${at}/limits/propose`, { key, json });

describe('a proposal of limits', () => {
	it('is the baseline plus a quarter of B/C, what alarms cover left out (ISO 20816-1 and -3 group 1 rigid, from memory): 2.105 + 4.5/4 = 3.23', async () => {
		const answer = await propose({ tags: ['fan.de.v'] });
		expect(answer.status).toBe(200);
		const { limits, items } = (await answer.json()) as Proposed;
		expect(limits.map((limit) => [limit.tag, limit.kind, limit.level, limit.value, limit.origin])).toEqual([
			['FAN.DE.V', 'high', 'alert', 3.23, 'standard'],
			['FAN.DE.V', 'high', 'danger', 7.1, 'standard'],
		]);
		expect(items[0]?.reasons.join(' ')).toContain('2860 good readings'); // 2,880 less the twenty in alarms
	});

	it('without history stands at the boundary and says so, and saves nothing', async () => {
		const { limits, items } = (await (await propose({ tags: ['NEW.V'] })).json()) as Proposed;
		expect(limits[0]?.value).toBe(4.5);
		expect(items[0]?.reasons.join(' ')).toContain('Too little history');
		const saved = await app.sql.query('SELECT 1 FROM limits');
		expect(saved.rowCount).toBe(0);
	});

	it('names the tags that are not published here, those of another site among them', async () => {
		const answer = await propose({ tags: ['FAN.DE.V', 'ELSEWHERE'] });
		expect(answer.status).toBe(400);
		expect(await answer.json()).toMatchObject({
			errors: [{ pointer: '/tags/1', detail: 'no published tag is named elsewhere' }],
		});
		expect((await propose({ tags: [] })).status).toBe(400);
		expect((await propose({ tags: ['FAN.DE.V'], from: 'yesterday' })).status).toBe(400);
		expect(
			await (await propose({ tags: ['FAN.DE.V'], from: '2026-01-02T00:00:00Z', to: '2026-01-01T00:00:00Z' })).json(),
		).toMatchObject({ errors: [{ pointer: '/from' }] });
	});

	it('is for those who may edit limits', async () => {
		expect((await propose({ tags: ['FAN.DE.V'] }, plant.keys.read)).status).toBe(403);
		expect((await propose({ tags: ['FAN.DE.V'] }, plant.keys.foreign)).status).toBe(404);
		const asked = async (jar: keyof Plant['jars']) =>
			(
				await app.ask(`${at}/limits/propose`, {
					jar: plant.jars[jar],
					headers: { origin: 'http://127.0.0.1:3000' },
					json: { tags: ['FAN.DE.V'] },
				})
			).status;
		expect(await asked('analyst')).toBe(200);
		expect(await asked('maintenance')).toBe(403);
		expect(await asked('foreign')).toBe(404);
	});
});

describe('a back-test of limits', () => {
	const limit = { tag: 'FAN.DE.V', kind: 'high', level: 'alert', value: 5, deadband: 0.5, raise_after_s: 120, clear_after_s: 0 };
	const test = (json: object, key = plant.keys.all) => app.ask(`${at}/limits/back-test`, { key, json });

	it('counts what stored readings would have raised, beside what stands now', async () => {
		await app.ask(`${at}/limits`, {
			key: plant.keys.all,
			method: 'PUT',
			json: { limits: [{ ...limit, value: 2.1 }], note: 'test' },
		});
		const answer = await test({ limits: [limit] });
		expect(answer.status).toBe(200);
		const body = (await answer.json()) as Record<string, unknown>;
		// 9.0 from 0 to 9 min: raised after two minutes, gone with the reading at 10 min: 480 s, once a day.
		expect(body.items).toEqual([
			{
				tag: 'FAN.DE.V',
				level: 'alert',
				kind: 'high',
				value: 5,
				raises: 2,
				alarm_s: 960,
				longest_s: 480,
				first_at: new Date(begin + 2 * MINUTE).toISOString(),
				last_at: new Date(begin + 86_400_000 + 2 * MINUTE).toISOString(),
				open: false,
			},
		]);
		// 2.005 lies above 2.1 - 0.5, so that the first excursion never ends.
		expect(body.standing).toMatchObject([{ value: 2.1, raises: 1, open: true }]);
		expect(body).toMatchObject({ readings: 2_880, complete: true });
	});

	it('looks at the stretch asked for only', async () => {
		const answer = await test({
			limits: [limit],
			from: new Date(begin + 86_400_000).toISOString(),
			to: new Date(end).toISOString(),
		});
		expect(await answer.json()).toMatchObject({ readings: 1_440, items: [{ raises: 1 }] });
	});

	it('says of a stale limit that stored readings tell nothing of it', async () => {
		expect(await (await test({ limits: [{ tag: 'FAN.DE.V', kind: 'stale', level: 'alert' }] })).json()).toMatchObject({
			items: [],
			skipped: [{ kind: 'stale' }],
		});
	});

	it('refuses a limit that could not be saved, and a tag that is not published here', async () => {
		expect(await (await test({ limits: [{ ...limit, value: undefined }] })).json()).toMatchObject({
			status: 400,
			errors: [{ pointer: '/limits/0/value' }],
		});
		expect(await (await test({ limits: [{ ...limit, tag: 'ELSEWHERE' }] })).json()).toMatchObject({
			errors: [{ pointer: '/limits/0/tag', detail: 'no published tag is named elsewhere' }],
		});
		expect((await test({ limits: [limit] }, plant.keys.read)).status).toBe(403);
	});
});
