import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { SITE_ROLES } from '#lib/domain/access/role.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { createCopyWriter, type CopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { createApp, type App, type Ask } from '../support/app.ts';
import { layPlant, layTag, type Plant } from '../support/plant.ts';
import { packWhole } from '../support/packing.ts';
import { batchOf, storedReading } from '../support/readings.ts';

let app: App;
let plant: Plant;
let tag: number;
let foreignTag: number;
let pool: Pool;
let writer: CopyWriter;
const DAY_MS = 86_400_000;
const now = Date.now();
const at = '/api/v1/sites/saltmere/dead-letters';

const ask = async (path: string, options: Ask = {}) => {
	const answer = await app.ask(`${at}${path}`, { key: plant.keys.all, ...options });
	const text = await answer.text();
	return { status: answer.status, body: text === '' ? null : JSON.parse(text) };
};
const sendAgain = (json: unknown, options: Ask = {}) => ask('/send-again', { method: 'POST', json, ...options });
const readings = async () =>
	(await app.sql.query('SELECT at, value FROM reading_history WHERE tag_id = $1 ORDER BY at, value', [tag])).rows;
const fed = async () =>
	(await app.sql.query('SELECT coalesce(max(position), 0)::int AS n FROM feed_heads WHERE site_id = $1', [plant.siteId])).rows[0]
		.n;

beforeAll(async () => {
	app = await createApp();
	plant = await layPlant(app.sql);
	tag = await layTag(app.sql, plant.siteId, 'A');
	foreignTag = await layTag(app.sql, plant.otherSiteId, 'F');
	pool = createPool(app.url, { name: 'test', max: 3, statementTimeoutMs: 0 });
	writer = createCopyWriter(pool, { now: Date.now });
});
afterAll(async () => {
	await writer.close();
	await pool.end();
	await app.close();
});

describe('readings that were set aside', () => {
	it('are listed with reason and count, and a foreign site sees its own only', async () => {
		const result = await writer.write(
			batchOf([
				storedReading(plant.siteId, tag, now - 401 * DAY_MS, 1),
				storedReading(plant.siteId, tag, now - 500 * DAY_MS, 2),
				storedReading(plant.siteId, tag, now, Number.NaN),
				storedReading(plant.otherSiteId, foreignTag, now - 401 * DAY_MS, 3),
			]),
		);
		expect(result).toMatchObject({ stored: 0, deadLetters: 4 });
		const listed = await ask('');
		expect(listed).toMatchObject({
			status: 200,
			body: {
				reasons: [
					{ reason: 'older-than-retention', count: 2 },
					{ reason: 'not-a-number', count: 1 },
				],
				next: null,
			},
		});
		expect(listed.body.items.map((one: { tag: string; value: number | null }) => [one.tag, one.value]).sort()).toEqual([
			['A', null],
			['A', 1],
			['A', 2],
		]);
		const page = await ask('?reason=older-than-retention&limit=1');
		expect(page.body.items).toHaveLength(1);
		const second = await ask(`?reason=older-than-retention&limit=1&after=${page.body.next}`);
		expect(second.body.items).toHaveLength(1);
		expect(second.body.items[0].id).not.toBe(page.body.items[0].id);
		expect(second.body.next).toBeNull();
		const other = await app.ask('/api/v1/sites/northfen/dead-letters', { key: plant.keys.foreign });
		expect((await other.json()).items).toMatchObject([{ tag: 'F', value: 3 }]);
	});

	it('come back with their reason while nothing has changed, and nothing is stored', async () => {
		const position = await fed();
		expect(await sendAgain({ reason: 'older-than-retention' })).toMatchObject({
			status: 200,
			body: { stored: 0, duplicates: 0, refused: { 'older-than-retention': 2 }, left: 0 },
		});
		expect(await sendAgain({ reason: 'not-a-number' })).toMatchObject({ body: { stored: 0, refused: { 'not-a-number': 1 } } });
		expect(await readings()).toEqual([]);
		expect(await fed()).toBe(position);
		expect((await ask('')).body.reasons).toMatchObject([{ count: 2 }, { count: 1 }]);
	});

	it('are stored and fed once when what stopped them is gone, one by one or all of a reason, with an entry in the audit', async () => {
		await app.sql.query(`INSERT INTO settings (key, value) VALUES ('retention', '{"rawDays": 450}')`);
		const position = await fed();
		const listed = await ask('?reason=older-than-retention');
		const first = listed.body.items.find((one: { value: number }) => one.value === 1);
		expect(await sendAgain({ ids: [first.id] })).toMatchObject({ status: 200, body: { stored: 1, refused: {}, left: 0 } });
		// Its letter is closed: the same id again does nothing.
		expect(await sendAgain({ ids: [first.id] })).toMatchObject({ body: { stored: 0, duplicates: 0, left: 0 } });
		// 500 days are still too many; set aside once more, the stored one would be a duplicate.
		await app.sql.query('UPDATE dead_letters SET resolved_at = NULL WHERE id = $1', [first.id]);
		expect(await sendAgain({ reason: 'older-than-retention' })).toMatchObject({
			body: { stored: 0, duplicates: 1, refused: { 'older-than-retention': 1 } },
		});
		expect(await readings()).toEqual([{ at: new Date(now - 401 * DAY_MS), value: 1 }]);
		expect(await fed()).toBe(position + 1);
		const entries = await app.sql.query(
			"SELECT site_id, actor_kind, after FROM audit_entries WHERE action = 'dead-letters.sent-again' ORDER BY id DESC LIMIT 3",
		);
		expect(entries.rows).toMatchObject([
			{ site_id: plant.siteId, actor_kind: 'key', after: { stored: 0, duplicates: 1 } },
			{ after: { stored: 1 } },
			{ after: { stored: 0, refused: { 'not-a-number': 1 } } },
		]);
	});

	it('are known as stored where their day is packed meanwhile', async () => {
		const day = Math.floor(now / DAY_MS) * DAY_MS - 420 * DAY_MS;
		await pool.query("UPDATE settings SET value = '{\"rawDays\": 400}' WHERE key = 'retention'");
		await writer.write(batchOf([storedReading(plant.siteId, tag, day + 5, 7), storedReading(plant.siteId, tag, day + 6, 8)]));
		await pool.query("UPDATE settings SET value = '{\"rawDays\": 450}' WHERE key = 'retention'");
		await writer.write(batchOf([storedReading(plant.siteId, tag, day + 5, 7)]));
		await packWhole(pool, day);
		expect(await sendAgain({ reason: 'older-than-retention' })).toMatchObject({
			body: { stored: 1, duplicates: 1, refused: { 'older-than-retention': 1 } },
		});
		expect((await readings()).filter(({ value }) => value > 6)).toMatchObject([{ value: 7 }, { value: 8 }]);
	});

	it('of another site are never touched by its id, nor does a letter reach a tag of another site', async () => {
		const other = await app.sql.query('SELECT id FROM dead_letters WHERE site_id = $1', [plant.otherSiteId]);
		expect(await sendAgain({ ids: [other.rows[0].id] })).toMatchObject({ body: { stored: 0, duplicates: 0, refused: {} } });
		const forged = await app.sql.query(
			'INSERT INTO dead_letters (site_id, tag_id, reason, row) SELECT $1, tag_id, reason, row FROM dead_letters WHERE site_id = $2 RETURNING id',
			[plant.siteId, plant.otherSiteId],
		);
		expect(await sendAgain({ ids: [forged.rows[0].id] })).toMatchObject({ body: { stored: 0, refused: { 'tag-unknown': 1 } } });
	});

	it('say what is wrong with a request for them', async () => {
		expect(await sendAgain({})).toMatchObject({ status: 400, body: { code: 'bad-input' } });
		expect(await sendAgain({ ids: ['x'] })).toMatchObject({ status: 400, body: { errors: [{ pointer: '/ids/0' }] } });
	});

	it.each([...SITE_ROLES, 'admin', 'foreign'] as const)('are for those who may edit sources: %s', async (role) => {
		const jar = plant.jars[role];
		const expected = role === 'foreign' ? 404 : role === 'integrator' || role === 'admin' ? 200 : 403;
		expect((await ask('', { key: undefined, jar })).status).toBe(expected);
		const sent = await sendAgain({ ids: [1] }, { key: undefined, jar, headers: { origin: 'http://127.0.0.1:3000' } });
		expect(sent.status).toBe(expected);
		const page = await app.ask('/saltmere/dead-letters', { jar });
		expect(page.status).toBe(expected);
	});
});
