import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { createApp, type App, type Ask } from '../support/app.ts';
import { freePort } from '../support/cluster.ts';
import { layPlant, layTag, type Plant } from '../support/plant.ts';

let app: App;
let plant: Plant;
let key: string;
const at = '/api/v1/sites/saltmere';

const ask = async (path: string, options: Ask = {}) => {
	const answer = await app.ask(`${at}${path}`, { key, ...options });
	const text = await answer.text();
	return { status: answer.status, body: text === '' ? null : JSON.parse(text) };
};
const mqtt = (name: string, settings: Record<string, unknown> = {}) => ({
	name,
	kind: 'mqtt',
	settings: { url: 'mqtt://127.0.0.1:1', user_name: 'hub', password: 'very secret', ...settings },
});

beforeAll(async () => {
	app = await createApp();
	plant = await layPlant(app.sql);
	key = plant.keys.all;
	await layTag(app.sql, plant.siteId, 'A');
});
afterAll(() => app.close());

describe('sources', () => {
	it('are added, read, changed and removed, and the secret never comes back, nor into the log of changes', async () => {
		const made = await ask('/sources', { json: mqtt('broker') });
		expect(made).toMatchObject({ status: 201, body: { name: 'broker', kind: 'mqtt', enabled: true, secrets_set: ['password'] } });
		const { id } = made.body;
		const changed = await ask(`/sources/${id}`, { method: 'PATCH', json: { settings: { qos: 0 }, notes: 'in the cellar' } });
		expect(changed).toMatchObject({
			status: 200,
			body: { notes: 'in the cellar', settings: { qos: 0, user_name: 'hub' }, secrets_set: ['password'] },
		});
		const listed = await ask('/sources');
		expect(listed.body.items.map((source: { name: string }) => source.name)).toEqual(['broker', 'gateway']);
		for (const seen of [made, changed, listed]) expect(JSON.stringify(seen.body)).not.toContain('very secret');
		const kept = await app.sql.query('SELECT secrets FROM sources WHERE id = $1', [id]);
		expect(kept.rows).toEqual([{ secrets: { password: 'very secret' } }]);
		expect((await ask(`/sources/${id}`, { method: 'DELETE' })).status).toBe(204);
		expect((await ask(`/sources/${id}`)).status).toBe(404);
		const audit = await app.sql.query(
			"SELECT action, row_to_json(a)::text AS entry FROM audit_entries a WHERE subject_kind = 'source' ORDER BY id",
		);
		expect(audit.rows.map(({ action }) => action)).toEqual(['source.created', 'source.changed', 'source.deleted']);
		for (const { entry } of audit.rows) expect(entry).not.toContain('very secret');
	});

	it('are refused where another has the name or the device, the other one named', async () => {
		expect(await ask('/sources', { json: mqtt('Gateway') })).toMatchObject({ status: 409, body: { code: 'name-taken' } });
		const second = { name: 'second', kind: 'modbus', settings: { host: '127.0.0.1', port: 15_020 } };
		const refused = await ask('/sources', { json: second });
		expect(refused).toMatchObject({ status: 409, body: { code: 'address-taken' } });
		expect(refused.body.detail).toContain('"gateway"');
	});

	it('that published tags read are not removed', async () => {
		expect(await ask(`/sources/${plant.sourceId}`, { method: 'DELETE' })).toMatchObject({
			status: 409,
			body: { code: 'in-use' },
		});
	});

	it('say every place of the settings that is wrong', async () => {
		const answer = await ask('/sources', { json: mqtt('other', { url: 'nowhere', qos: 7, colour: 'red' }) });
		expect(answer.status).toBe(400);
		expect(answer.body.errors.map(({ pointer }: { pointer: string }) => pointer).sort()).toEqual([
			'/settings/colour',
			'/settings/qos',
			'/settings/url',
		]);
		const change = await ask(`/sources/${plant.sourceId}`, { method: 'PATCH', json: { settings: { port: 70_000 } } });
		expect(change).toMatchObject({ status: 400, body: { errors: [{ pointer: '/settings/port' }] } });
	});

	it('no collector has taken are waiting, with counts of nothing', async () => {
		expect(await ask(`/sources/${plant.sourceId}/health`)).toMatchObject({
			status: 200,
			body: { state: 'waiting', good: 0, minutes: [] },
		});
		expect((await ask('/sources/none/health')).status).toBe(404);
	});

	it('that do not answer are tested with a report of what failed, never an error', async () => {
		const port = await freePort();
		const { name: _name, ...settings } = mqtt('x', { url: `mqtt://127.0.0.1:${port}` });
		const tried = await ask('/sources/test', { json: settings });
		expect(tried).toMatchObject({
			status: 200,
			body: { ok: false, advice: { text: expect.any(String), check: expect.any(String) } },
		});
		expect((await ask('/sources/none/test', { method: 'POST' })).status).toBe(404);
	});
});

describe('test values', () => {
	it('stand in for a tag’s own, marked, until their time', async () => {
		const set = await ask('/test-values', { json: { tag: 'A', value: 12.5, seconds: 60 } });
		expect(set).toMatchObject({ status: 201, body: { tag: 'A', value: 12.5 } });
		const latest = await ask('/latest?tags=A');
		// GoodLocalOverride is 0x00960000 in the standard's list of status codes.
		expect(latest.body.items).toMatchObject([
			{ tag: 'A', value: 12.5, test: true, quality: { code: 0x00960000, name: 'GoodLocalOverride' } },
		]);
		await app.sql.query("UPDATE test_values SET until = now() - interval '1 second'");
		expect((await ask('/latest?tags=A')).body.items).toMatchObject([{ test: false, value: null }]);
	});

	it('of an unknown tag or without an end are refused', async () => {
		expect(await ask('/test-values', { json: { tag: 'nowhere', value: 1, seconds: 60 } })).toMatchObject({
			status: 400,
			body: { errors: [{ pointer: '/tag' }] },
		});
		expect((await ask('/test-values', { json: { tag: 'A', value: 1, seconds: 999_999 } })).status).toBe(400);
		expect((await ask('/test-values', { key: plant.keys.read, json: { tag: 'A', value: 1, seconds: 60 } })).status).toBe(403);
	});
});
