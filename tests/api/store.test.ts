import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { SITE_ROLES } from '#lib/domain/access/role.ts';
import { RETENTION } from '#lib/domain/retention.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { createCopyWriter, type CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { dropExpired } from '#lib/pipeline/store/partitions.ts';
import { regroupBlocks } from '#lib/pipeline/store/pack-late.ts';
import { createApp, type App } from '../support/app.ts';
import { DAY_MS, packWhole } from '../support/packing.ts';
import { layPlant, layTag, type Plant } from '../support/plant.ts';
import { batchOf, storedReading } from '../support/readings.ts';

let app: App;
let plant: Plant;
let pool: Pool;
let writer: CopyWriter;
let velocity: number;
let temperature: number;
let foreign: number;
const now = Date.now();
const midnight = Math.floor(now / DAY_MS) * DAY_MS;

beforeAll(async () => {
	app = await createApp();
	plant = await layPlant(app.sql);
	velocity = await layTag(app.sql, plant.siteId, 'V');
	temperature = await layTag(app.sql, plant.siteId, 'T');
	foreign = await layTag(app.sql, plant.otherSiteId, 'F');
	await app.sql.query("UPDATE tags SET quantity = 'temperature' WHERE id = ANY($1)", [[temperature, foreign]]);
	pool = createPool(app.url, { name: 'test', max: 3, statementTimeoutMs: 0 });
	writer = createCopyWriter(pool, { now: Date.now });
	for (const day of [midnight - 60 * DAY_MS, midnight - 30 * DAY_MS]) {
		await writer.write(
			batchOf(
				[velocity, temperature, foreign].flatMap((tag) =>
					Array.from({ length: 1_440 }, (_, i) =>
						storedReading(tag === foreign ? plant.otherSiteId : plant.siteId, tag, day + i * 60_000, Math.sin(i)),
					),
				),
			),
		);
		await packWhole(pool, day);
	}
	await pool.query('SELECT drop_packed_days()');
});
afterAll(async () => {
	await writer.close();
	await pool.end();
	await app.close();
});

const act = async (name: string, form: Record<string, string>, jar = plant.jars.admin) => {
	const answer = await app.ask(`/admin/store?/${name}`, { form, jar, headers: { origin: 'http://127.0.0.1:3000' } });
	return { status: answer.status, body: await answer.json() };
};
const page = async () => (await app.ask('/admin/store', { jar: plant.jars.admin })).json();
const whole = Object.fromEntries(Object.entries(RETENTION).map(([name, days]) => [name, String(days)]));
const kept = async (tag: number) =>
	(await pool.query<{ n: number }>('SELECT count(*) AS n FROM reading_history WHERE tag_id = $1', [tag])).rows[0]?.n;
const regroup = () => regroupBlocks(pool, { signal: new AbortController().signal, rest: 0 });
const audits = async (action: string) =>
	(
		await app.sql.query(
			'SELECT site_id, actor_kind, subject_name, before, after FROM audit_entries WHERE action = $1 ORDER BY id',
			[action],
		)
	).rows;

describe('the page of the store', () => {
	it('says what takes the room, what a reading takes, how far it reaches back and what retention makes of it', async () => {
		const { report } = await page();
		// Three tags, two days, one reading a minute.
		expect(report.size.packedDays.slice(0, 2).map((day: { readings: number }) => day.readings)).toEqual([4_320, 4_320]);
		expect(report.oldestDay).toBe(new Date(midnight - 60 * DAY_MS).toISOString().slice(0, 10));
		expect(report.readingsPerDay).toBe(4_320);
		expect(report.bytesPerPacked).toBeGreaterThan(1);
		expect(report.bytesPerPacked).toBeLessThan(15);
		const size = await app.sql.query('SELECT pg_database_size(current_database())::int AS n');
		expect(Math.abs(report.bytes - size.rows[0].n)).toBeLessThan(size.rows[0].n / 10);
		expect(report.kinds.map((one: { kind: string }) => one.kind)).toEqual([
			'rows',
			'blocks',
			'minute',
			'hour',
			'journal',
			'rest',
		]);
		expect(report.forecast.steadyBytes).toBeGreaterThan(report.bytes);
		expect(report.retention).toEqual(RETENTION);
	});

	it.each([...SITE_ROLES, 'foreign'] as const)('is the administrator’s: not for %s, nor any of its acts', async (role) => {
		expect((await app.ask('/admin/store', { jar: plant.jars[role] })).status).toBe(403);
		for (const name of ['retention', 'addRule', 'removeRule'])
			expect((await act(name, { ...whole, days: '30', quantity: 'flow', id: '1' }, plant.jars[role])).status).toBe(403);
		expect(await audits('retention.changed')).toEqual([]);
	});
});

describe('retention', () => {
	it('is set by the administrator with an entry in the audit, and says which field is wrong', async () => {
		expect(await act('retention', { ...whole, rawDays: '1.5', minuteDays: '' })).toMatchObject({
			status: 400,
			body: { faults: { rawDays: 'a whole number of days from 3 to 36,500', minuteDays: expect.any(String) } },
		});
		expect(await act('retention', { ...whole, rowDays: '2' })).toMatchObject({
			status: 400,
			body: { faults: { rowDays: expect.any(String) } },
		});
		expect(await act('retention', { ...whole, rowDays: '500' })).toMatchObject({
			status: 400,
			body: { faults: { rawDays: 'must be at least the 500 days that readings stay rows' } },
		});
		expect(await audits('retention.changed')).toEqual([]);
		expect((await act('retention', { ...whole, rawDays: '500' })).status).toBe(200);
		expect(await audits('retention.changed')).toMatchObject([
			{ site_id: null, actor_kind: 'person', before: { rawDays: 400 }, after: { rawDays: 500 } },
		]);
		expect((await page()).report.retention.rawDays).toBe(500);
	});

	it('is made shorter only with the word that says that data goes', async () => {
		expect(await act('retention', whole)).toMatchObject({ status: 409, body: { mustConfirm: true } });
		expect((await page()).report.retention.rawDays).toBe(500);
		expect((await act('retention', { ...whole, confirm: 'drop' })).status).toBe(200);
		expect((await page()).report.retention.rawDays).toBe(400);
	});

	it('of one site and quantity drops that data alone, by its tables, and the rest stays', async () => {
		const rule = { site: String(plant.siteId), quantity: 'temperature', days: '45' };
		expect(await act('addRule', rule)).toMatchObject({ status: 409, body: { mustConfirm: true } });
		expect(await act('addRule', { ...rule, confirm: 'drop' })).toMatchObject({ status: 200 });
		expect(await act('addRule', { ...rule, confirm: 'drop' })).toMatchObject({ status: 409 });
		expect(await act('addRule', { site: '', quantity: '', days: '600' })).toMatchObject({ status: 400 });
		expect(await audits('retention-rule.added')).toMatchObject([
			{ subject_name: 'temperature at saltmere', after: { raw_days: 45 } },
		]);
		const before = [await kept(velocity), await kept(temperature), await kept(foreign)];
		expect(before).toEqual([2_880, 2_880, 2_880]);
		expect(await regroup()).toBe(2); // a tag in two weeks
		expect([await kept(velocity), await kept(temperature), await kept(foreign)]).toEqual(before);
		expect((await pool.query('SELECT must_regroup AS due FROM packing_state')).rows[0].due).toBe(false);
		await dropExpired(pool, now);
		// The week of the day 60 days ago ended more than 45 days ago; the one 30 days ago did not.
		expect([await kept(velocity), await kept(temperature), await kept(foreign)]).toEqual([2_880, 1_440, 2_880]);
		const { report } = await page();
		expect(report.rules).toMatchObject([{ site: 'saltmere', quantity: 'temperature', rawDays: 45, tags: 1 }]);
	});

	it('of its tag sends a reading that is older to the dead letters, and makes no table for it', async () => {
		const tables = async () =>
			(await pool.query("SELECT count(*)::int AS n FROM pg_class WHERE relname ~ '^(readings|reading_blocks)_'")).rows[0].n;
		const before = await tables();
		const at = midnight - 50 * DAY_MS;
		const result = await writer.write(
			batchOf([
				storedReading(plant.siteId, temperature, at, 1),
				storedReading(plant.siteId, velocity, at, 1),
				storedReading(plant.siteId, velocity, midnight - 401 * DAY_MS, 1),
			]),
		);
		expect(result).toMatchObject({ stored: 1, deadLetters: 2 });
		expect(await tables()).toBe(before);
	});

	it('follows the wider rule again when the narrow one is removed', async () => {
		const [rule] = (await page()).report.rules;
		expect((await act('removeRule', { id: String(rule.id) })).status).toBe(200);
		expect((await act('removeRule', { id: String(rule.id) })).status).toBe(404);
		expect(await audits('retention-rule.removed')).toMatchObject([{ before: { raw_days: 45 } }]);
		expect(await regroup()).toBe(1);
		expect(await kept(temperature)).toBe(1_440);
		expect((await pool.query('SELECT DISTINCT retention_group AS g FROM reading_blocks')).rows).toEqual([{ g: 0 }]);
	});
});
