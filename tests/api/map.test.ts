import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { startModbusSimulator, type ModbusSimulator } from '../../simulators/modbus/modbus-simulator.ts';
import { createApp, type App, type Ask } from '../support/app.ts';
import { layPlant, type Plant } from '../support/plant.ts';

let app: App;
let plant: Plant;
let device: ModbusSimulator;
const at = '/api/v1/sites/saltmere';

const ask = async (path: string, options: Ask = {}) => {
	const answer = await app.ask(`${at}${path}`, { key: plant.keys.all, ...options });
	const text = await answer.text();
	const isJson = answer.headers.get('content-type')?.includes('json');
	return { status: answer.status, headers: answer.headers, text, body: isJson ? JSON.parse(text) : null };
};
const row = (tag: string, register: number, extra: Record<string, unknown> = {}) => ({
	tag,
	source: 'gateway',
	unit: 'mm/s',
	unit_id: 1,
	table: 'input-register',
	register,
	data_type: 'uint16',
	...extra,
});
const send = (rows: unknown[], options: Ask = {}, extra: Record<string, unknown> = {}) =>
	ask('/map/draft', { method: 'PATCH', json: { rows, ...extra }, ...options });
const publish = (note = 'a note', extra: Record<string, unknown> = {}) =>
	ask('/map/draft/publish', { method: 'POST', json: { note, ...extra } });
const mapped = async () => (await ask('/map')).body.rows as { id: number; tag: string; unit: string }[];
const idOf = async (tag: string) => (await mapped()).find((one) => one.tag === tag)?.id;

beforeAll(async () => {
	app = await createApp();
	plant = await layPlant(app.sql);
	device = await startModbusSimulator({ port: 0, image: (_, __, register) => (register < 50 ? 300 + register : null) });
	await app.sql.query(
		`UPDATE sources SET settings = jsonb_build_object('transport', 'tcp', 'host', '127.0.0.1', 'port', $1::int, 'timeout_ms', 500) WHERE id = $2`,
		[device.port, plant.sourceId],
	);
});
afterAll(async () => {
	await device.stop();
	await app.close();
});

describe('the draft', () => {
	it('is saved although it is in error, and answers the check by row', async () => {
		const answer = await send([row('A', 1), row('B', 70_000, { unit: 'furlongs' })]);
		expect(answer.status).toBe(200);
		expect(
			answer.body.errors.map((one: { tag: string; field: string; code: string }) => `${one.tag} ${one.field} ${one.code}`).sort(),
		).toEqual(['B register number-range', 'B unit unknown-unit']);
		expect((await ask('/map/draft')).body).toMatchObject({
			changes: 2,
			revision: 0,
			rows: [
				{ tag: 'A', state: 'added' },
				{ tag: 'B', state: 'added' },
			],
		});
		expect(await publish()).toMatchObject({ status: 409, body: { code: 'has-errors', check: { errors: expect.any(Array) } } });
		expect((await send([{ tag: 'B', delete: true }])).body.errors).toEqual([]);
	});

	it('refuses only a wrong shape, with every place that is wrong', async () => {
		const answer = await send([{ ...row('C', 2), register: 'two', colour: 'red' }]);
		expect(answer.status).toBe(400);
		expect(answer.body.errors.map((one: { pointer: string }) => one.pointer).sort()).toEqual([
			'/rows/0/colour',
			'/rows/0/register',
		]);
	});

	it('answers 412 when If-Match names another version, and 409 with both when a row was changed meanwhile', async () => {
		const before = await ask('/map/draft');
		const etag = before.headers.get('etag') ?? '';
		const { row_version: seen } = before.body.rows[0];
		expect((await send([{ tag: 'A', description: 'first' }], { headers: { 'if-match': etag } })).status).toBe(200);
		expect(await send([{ tag: 'A', description: 'second' }], { headers: { 'if-match': etag } })).toMatchObject({
			status: 412,
			body: { code: 'draft-changed' },
		});
		const refused = await send([{ tag: 'A', description: 'third', row_version: seen }]);
		expect(refused).toMatchObject({
			status: 409,
			body: { code: 'row-changed', conflicts: [{ tag: 'A', sent: { description: 'third' }, current: { description: 'first' } }] },
		});
	});

	it('publishes as a numbered revision with the tags’ ids for life', async () => {
		expect(await publish('first')).toMatchObject({ status: 200, body: { revision: 1, started: 1, stopped: 0, changed: 0 } });
		expect(await mapped()).toMatchObject([{ tag: 'A', unit: 'mm/s', id: expect.any(Number) }]);
		expect((await ask('/map/draft')).body).toMatchObject({ changes: 0, revision: 1, rows: [{ state: 'published' }] });
		expect(await publish()).toMatchObject({ status: 409, body: { code: 'nothing-to-publish' } });
		const audit = await app.sql.query("SELECT note, after FROM audit_entries WHERE action = 'map.published'");
		expect(audit.rows).toMatchObject([{ note: 'first', after: { added: ['A'], started: 1 } }]);
	});

	it('refuses to publish a version that is not the one seen', async () => {
		await send([row('D', 3)]);
		expect(await publish('x', { version: 1 })).toMatchObject({ status: 409, body: { code: 'draft-changed' } });
		expect((await publish('second')).body).toMatchObject({ revision: 2, started: 1 });
	});
});

describe('names and units', () => {
	it('a rename keeps the id, two tags may swap their names, and receivers are told', async () => {
		const [a, d] = [await idOf('A'), await idOf('D')];
		await send([
			{ id: a, tag: 'D' },
			{ id: d, tag: 'A' },
		]);
		expect((await publish('swapped')).body).toMatchObject({ revision: 3, changed: 2 });
		expect([await idOf('D'), await idOf('A')]).toEqual([a, d]);
		const feed = await ask('/feed?after=0');
		expect(
			feed.body.items
				.filter((item: { event?: string }) => item.event === 'tag-renamed')
				.map((item: { from: string; tag: string }) => `${item.from}>${item.tag}`)
				.sort(),
		).toEqual(['A>D', 'D>A']);
	});

	it('a tag that is mapped again under its name goes on with its id, unless its unit differs', async () => {
		const id = await idOf('D');
		await send([{ tag: 'D', delete: true }]);
		expect((await publish('without D')).body).toMatchObject({ stopped: 1 });
		expect((await ask('/tags?retired=true')).body.items.map((tag: { name: string }) => tag.name)).toContain('D');
		await send([row('D', 1)]);
		await publish('with D again');
		expect(await idOf('D')).toBe(id);
		await send([{ tag: 'D', delete: true }]);
		await publish('gone');
		await send([row('D', 1, { unit: 'Cel' })]);
		await publish('another D');
		expect(await idOf('D')).not.toBe(id);
	});

	it('another unit of a tag with limits is an error, unless the draft converts: then limits, deadband and all convert with it', async () => {
		const limits = await ask('/limits', {
			method: 'PUT',
			json: { limits: [{ tag: 'A', kind: 'high', level: 'alert', value: 4.5, deadband: 0.2 }], note: 'zone' },
		});
		expect(limits.status).toBe(200);
		const refused = await send([{ tag: 'A', unit: '[in_i]/s', raw_unit: 'mm/s' }]);
		expect(refused.body.errors).toMatchObject([{ tag: 'A', field: 'unit', code: 'unit-of-settled-tag' }]);
		expect((await send([{ tag: 'A' }], {}, { convert: true })).body.errors).toEqual([]);
		expect((await publish('in inches')).status).toBe(200);
		const converted = (await ask('/limits')).body.limits.find((limit: { tag: string }) => limit.tag === 'A');
		// 4.5 and 0.2 mm/s over 25.4.
		expect(converted.value).toBeCloseTo(4.5 / 25.4, 12);
		expect(converted.deadband).toBeCloseTo(0.2 / 25.4, 12);
	});
});

describe('revisions', () => {
	it('are listed newest first, compared and restored as a new one', async () => {
		const list = (await ask('/map/revisions')).body.items;
		expect(list.at(-1)).toMatchObject({ revision: 1, note: 'first' });
		const diff = await ask('/map/revisions/1/diff?to=2');
		expect(diff.body).toMatchObject({ from: 1, to: 2, added: [{ tag: 'D' }], removed: [], changed: [] });
		const newest = list[0].revision;
		const restored = await ask('/map/revisions/2/restore', { method: 'POST', json: { convert: true } });
		expect(restored).toMatchObject({ status: 200, body: { revision: newest + 1 } });
		expect((await mapped()).map((one) => one.tag).sort()).toEqual(['A', 'D']);
		expect((await ask('/map/revisions/99/diff')).status).toBe(404);
		expect((await ask('/map/revisions/99/restore', { method: 'POST', json: {} })).status).toBe(404);
	});
});

describe('CSV', () => {
	it('goes out and comes in again unchanged', async () => {
		const out = await ask('/map', { headers: { accept: 'text/csv' } });
		expect(out.headers.get('content-type')).toContain('text/csv');
		expect(out.text.startsWith('id,tag,plant_tag')).toBe(true);
		const back = await ask('/map/draft', { method: 'PUT', body: out.text, headers: { 'content-type': 'text/csv' } });
		expect(back).toMatchObject({ status: 200, body: { errors: [] } });
		expect((await ask('/map/draft')).body.changes).toBe(0);
	});

	it('names every bad cell by row and column and takes nothing', async () => {
		const answer = await ask('/map/draft', {
			method: 'PATCH',
			body: 'tag;register;scale\nX;1;0,5\nY;one;0x10\n',
			headers: { 'content-type': 'text/csv' },
		});
		expect(answer.status).toBe(400);
		expect(answer.body.errors.map((one: { pointer: string }) => one.pointer)).toEqual(['/rows/1/register', '/rows/1/scale']);
		expect((await ask('/map/draft')).body.changes).toBe(0);
	});
});

describe('a dry run', () => {
	it('reads draft rows from the live source and stores nothing', async () => {
		await send([row('NEW', 7), row('NOWHERE', 60)]);
		const answer = await ask('/map/draft/dry-run', { method: 'POST', json: {} });
		expect(answer.body.items).toMatchObject([
			{ tag: 'NEW', value: 307, quality: { name: 'Good' } },
			{ tag: 'NOWHERE', value: null, quality: { name: 'BadConfigurationError' } },
		]);
		expect((await app.sql.query('SELECT count(*)::int AS n FROM readings')).rows[0].n).toBe(0);
	}, 20_000);
});

describe('machines', () => {
	it('are made by a publish that names them, and by hand, unique in their site whatever the case', async () => {
		await send([row('M', 8, { area: 'High Lift', machine: 'HL-1', point: 'MDE', axis: 'horizontal' })]);
		await send([{ tag: 'NOWHERE', delete: true }]);
		expect((await publish('machines')).status).toBe(200);
		const list = await ask('/machines');
		expect(list.body.items).toMatchObject([{ name: 'HL-1', area: 'High Lift', tags: 1, points: [{ name: 'MDE' }] }]);
		expect(await ask('/machines', { json: { name: 'hl-1' } })).toMatchObject({ status: 409, body: { code: 'name-taken' } });
		const made = await ask('/machines', { json: { name: 'HL-2', area: 'high lift', data: { power_kw: 315 } } });
		expect(made).toMatchObject({ status: 201, body: { area: 'High Lift', data: { power_kw: 315 } } });
		const changed = await ask(`/machines/${made.body.id}`, {
			method: 'PATCH',
			json: { area: 'Low Lift', version: made.body.version },
		});
		expect(changed.body).toMatchObject({ name: 'HL-2', area: 'Low Lift', data: { power_kw: 315 } });
		expect((await ask(`/machines/${made.body.id}`, { method: 'PATCH', json: { name: 'X', version: 1 } })).status).toBe(409);
		expect(await ask(`/machines/${list.body.items[0].id}`, { method: 'DELETE' })).toMatchObject({
			status: 409,
			body: { code: 'in-use' },
		});
		expect((await ask(`/machines/${made.body.id}`, { method: 'DELETE' })).status).toBe(204);
		expect((await ask('/machines/999999', { method: 'DELETE' })).status).toBe(404);
	});

	it('a row that contradicts its machine’s area is an error', async () => {
		const answer = await send([row('M2', 9, { area: 'Dosing', machine: 'HL-1' })]);
		expect(answer.body.errors).toMatchObject([{ tag: 'M2', field: 'area', code: 'area-contradicts-machine' }]);
	});
});

describe('rights', () => {
	it('a key that only reads sees the map and no draft, and changes nothing', async () => {
		const reading = { key: plant.keys.read };
		expect((await ask('/map', reading)).status).toBe(200);
		expect((await ask('/map/draft', reading)).status).toBe(403);
		expect((await send([row('Z', 1)], reading)).status).toBe(403);
		expect((await ask('/map', { key: plant.keys.foreign })).status).toBe(404);
	});
});
