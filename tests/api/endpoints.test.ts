import { Ajv2020 } from 'ajv/dist/2020.js';
import addFormats from 'ajv-formats';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { createApp, type App } from '../support/app.ts';
import { layPlant, layTag, type Plant } from '../support/plant.ts';

let app: App;
let plant: Plant;
let key: string;
const at = '/api/v1/sites/saltmere';

const ajv = new Ajv2020({ strict: false });
(addFormats as unknown as (ajv: Ajv2020) => void)(ajv);
let document: {
	paths: Record<string, Record<string, { responses: Record<string, { content?: Record<string, { schema: object }> }> }>>;
};

/** The answer's JSON, after it was held against the published description. */
async function described(
	path: string,
	template: string,
	ask: Parameters<App['ask']>[1] = {},
): Promise<Record<string, never> & { items: never[] }> {
	const answer = await app.ask(path, { key, ...ask });
	const body = await answer.json();
	const method = (ask.method ?? (ask.json === undefined ? 'GET' : 'POST')).toLowerCase();
	expect([path, answer.status, answer.ok ? null : body]).toEqual([path, expect.any(Number), null]);
	const schema = document.paths[template]?.[method]?.responses[String(answer.status)]?.content?.['application/json']?.schema;
	expect([template, method, schema === undefined]).toEqual([template, method, false]);
	const isValid = ajv.validate(schema ?? false, body);
	expect([path, isValid ? null : ajv.errors]).toEqual([path, null]);
	return body;
}

async function problem(
	path: string,
	ask: Parameters<App['ask']>[1] = {},
): Promise<{ status: number; type: string; errors?: unknown[] }> {
	const answer = await app.ask(path, { key, ...ask });
	expect(answer.headers.get('content-type')).toBe('application/problem+json');
	return answer.json();
}

beforeAll(async () => {
	app = await createApp();
	plant = await layPlant(app.sql);
	key = plant.keys.all;
	document = await (await app.ask('/api/v1/openapi.json')).json();
	for (const name of ['PUMP1.DE.V', 'PUMP1.NDE.V', 'fan-2.v']) {
		await layTag(app.sql, plant.siteId, name, {
			plant_tag: `=A1+${name}`,
			description: 'drive end',
			low_range: 0,
			high_range: 50,
		});
	}
	await layTag(app.sql, plant.otherSiteId, 'ELSEWHERE');
});
afterAll(() => app.close());

it('the description needs no key and lists every endpoint that answers', async () => {
	const answer = await app.ask('/api/v1/openapi.json');
	expect(answer.status).toBe(200);
	expect((await answer.json()).openapi).toBe('3.1.0');
	expect(Object.keys(document.paths)).toContain('/api/v1/sites/{site}/tags');
});

it('sites lists those that the key carries', async () => {
	const body = await described('/api/v1/sites', '/api/v1/sites');
	expect(body.items).toEqual([{ slug: 'saltmere', name: 'saltmere', time_zone: 'UTC' }]);
});

describe('tags', () => {
	it('come by name, in pages that a cursor joins', async () => {
		const first = await described(`${at}/tags?limit=2`, '/api/v1/sites/{site}/tags');
		expect(first.items.map(({ name }) => name)).toEqual(['fan-2.v', 'PUMP1.DE.V']);
		expect(first.next).toMatch(/^[A-Za-z0-9._-]+$/);
		const second = await described(`${at}/tags?limit=2&after=${first.next}`, '/api/v1/sites/{site}/tags');
		expect(second.items.map(({ name }) => name)).toEqual(['PUMP1.NDE.V']);
		expect(second.next).toBeNull();
	});

	it('are found by part of the name or of the plant’s own code, a percent sign meaning itself', async () => {
		const found = async (search: string) =>
			(await (await app.ask(`${at}/tags?search=${encodeURIComponent(search)}`, { key })).json()).items.length;
		expect(await found('pump1')).toBe(2);
		expect(await found('=A1+fan')).toBe(1);
		expect(await found('%')).toBe(0);
	});

	it('come one at a time with mapping and limits, whatever the case of the name', async () => {
		const tag = await described(`${at}/tags/pump1.de.v`, '/api/v1/sites/{site}/tags/{name}');
		expect(tag).toMatchObject({
			name: 'PUMP1.DE.V',
			unit: 'mm/s',
			range: { low: 0, high: 50 },
			mapping: { high_range: 50 },
			limits: [],
		});
		expect(await problem(`${at}/tags/ELSEWHERE`)).toMatchObject({ status: 404, type: 'urn:millrace:problem:tag-not-found' });
	});

	it('stream as CSV with a header row, text that looks like a formula made harmless', async () => {
		const answer = await app.ask(`${at}/tags`, { key, headers: { accept: 'text/csv' } });
		expect(answer.headers.get('content-type')).toMatch(/^text\/csv/);
		const lines = (await answer.text()).split('\r\n');
		expect(lines[0]).toMatch(/^id,name,plant_tag,/);
		expect(lines).toHaveLength(5);
		expect(lines[1]).toContain("'=A1+fan-2.v");
	});

	it('stream as one JSON object a line', async () => {
		const answer = await app.ask(`${at}/tags`, { key, headers: { accept: 'application/x-ndjson' } });
		const lines = (await answer.text()).trimEnd().split('\n');
		expect(lines.map((line) => JSON.parse(line).name)).toEqual(['fan-2.v', 'PUMP1.DE.V', 'PUMP1.NDE.V']);
	});

	it.each([
		['limit=0', 'limit'],
		['limit=10001', 'limit'],
		['limit=1e3', 'limit'],
		['after=%25', 'after'],
		['colour=red', 'colour'],
		['search=a&search=b', 'search'],
	])('refuse ?%s and name the parameter', async (query, parameter) => {
		expect(await problem(`${at}/tags?${query}`)).toMatchObject({
			status: 400,
			type: 'urn:millrace:problem:bad-input',
			errors: [{ parameter, detail: expect.any(String) }],
		});
	});
});

describe('limits', () => {
	const danger = { cause: 'bearing', consequence: 'standstill', response: 'stop the pump', respond_within_s: 600 };
	const put = (body: unknown) => app.ask(`${at}/limits`, { key, method: 'PUT', json: body });

	it('are saved as numbered revisions, come back as sent, and replace those of the tags named only', async () => {
		const limits = [
			{ tag: 'PUMP1.DE.V', kind: 'high', level: 'alert', value: 4.5, deadband: 0.2 },
			{ tag: 'PUMP1.DE.V', kind: 'high', level: 'danger', value: 7.1, ...danger },
			{ tag: 'fan-2.v', kind: 'high', level: 'alert', value: 2.8 },
		];
		expect(await (await put({ limits, note: 'from the maker' })).json()).toEqual({ revision: 1, changed: expect.any(Array) });
		const listed = await described(`${at}/limits`, '/api/v1/sites/{site}/limits');
		expect(listed.revision).toBe(1);
		expect((listed.limits as unknown as { tag: string; value: number }[]).map(({ tag, value }) => [tag, value])).toEqual([
			['PUMP1.DE.V', 4.5],
			['PUMP1.DE.V', 7.1],
			['fan-2.v', 2.8],
		]);
		// What was answered can be sent back, and changes nothing.
		expect(await (await put({ limits: listed.limits, note: 'again' })).json()).toEqual({ revision: 1, changed: [] });

		const second = {
			limits: [{ tag: 'pump1.de.v', kind: 'high', level: 'alert', value: 4.5, deadband: 0.2 }],
			note: 'danger taken out',
		};
		expect(await (await put(second)).json()).toEqual({ revision: 2, changed: ['PUMP1.DE.V'] });
		const old = await described(`${at}/limits?revision=1`, '/api/v1/sites/{site}/limits');
		expect(old.limits).toHaveLength(3);
		const now = await described(`${at}/limits`, '/api/v1/sites/{site}/limits');
		expect(now.limits).toHaveLength(2);
		// The limit that stayed is the same row, so that open alarms keep it.
		const rows = await app.sql.query('SELECT from_revision FROM limits WHERE to_revision IS NULL ORDER BY id');
		expect(rows.rows).toEqual([{ from_revision: 1 }, { from_revision: 1 }]);
		const audit = await app.sql.query(
			"SELECT subject_name, actor_kind, note FROM audit_entries WHERE action = 'limit.changed' ORDER BY id DESC LIMIT 1",
		);
		expect(audit.rows).toEqual([{ subject_name: 'PUMP1.DE.V', actor_kind: 'key', note: 'danger taken out' }]);
	});

	it('of a tag named without any are taken away', async () => {
		expect(await (await put({ limits: [], tags: ['fan-2.v'] })).json()).toEqual({ revision: 3, changed: ['fan-2.v'] });
	});

	it('are refused whole, every wrong place named by its pointer', async () => {
		const answer = await put({
			limits: [
				{ tag: 'PUMP1.DE.V', kind: 'high', level: 'danger', value: 9 },
				{ tag: 'PUMP1.DE.V', kind: 'high', level: 'alert', value: '4.5' },
			],
			colour: 'red',
		});
		expect(answer.status).toBe(400);
		const { errors } = (await answer.json()) as { errors: { pointer: string }[] };
		expect(errors.map(({ pointer }) => pointer).sort()).toEqual([
			'/colour',
			'/limits/0/cause',
			'/limits/0/consequence',
			'/limits/0/respond_within_s',
			'/limits/0/response',
			'/limits/1/value',
		]);
	});

	it('of an unknown tag, and two of one kind and level, are refused', async () => {
		const one = { tag: 'PUMP1.DE.V', kind: 'low', level: 'alert', value: 1 };
		const answer = await put({ limits: [{ ...one, tag: 'ELSEWHERE' }, one, one] });
		const { errors } = (await answer.json()) as { errors: { pointer: string }[] };
		expect(errors.map(({ pointer }) => pointer)).toEqual(['/limits/0/tag', '/limits/2/kind']);
	});
});

describe('alarms', () => {
	let ids: number[];
	beforeAll(async () => {
		const tagId = (await app.sql.query("SELECT id FROM tags WHERE name = 'PUMP1.DE.V'")).rows[0].id;
		const rows = await app.sql.query(
			`INSERT INTO alarms (site_id, tag_id, direction, kind, level, level_now, raised_value, raised_at, cleared_at, acknowledged_at, limit_id) VALUES
			 ($1, $2, 'up', 'high', 'alert', NULL, 5, '2026-01-01T00:00:00Z', '2026-01-01T01:00:00Z', '2026-01-01T00:30:00Z', (SELECT min(id) FROM limits)),
			 ($1, $2, 'up', 'high', 'danger', NULL, 8, '2026-01-02T00:00:00Z', '2026-01-02T01:00:00Z', NULL, NULL),
			 ($1, $2, 'up', 'high', 'danger', 'alert', 9, '2026-01-03T00:00:00Z', NULL, NULL, NULL) RETURNING id`,
			[plant.siteId, tagId],
		);
		ids = rows.rows.map((row) => Number(row.id));
	});

	it('come newest raise first, with their state and the limit they met, in pages', async () => {
		const first = await described(`${at}/alarms?limit=2`, '/api/v1/sites/{site}/alarms');
		expect(first.items.map(({ state }) => state)).toEqual(['active-unacknowledged', 'returned-unacknowledged']);
		const second = await described(`${at}/alarms?limit=2&after=${first.next}`, '/api/v1/sites/{site}/alarms');
		expect(second.items).toMatchObject([{ id: ids[0], state: 'closed', value: 5, limit: { value: 4.5 } }]);
	});

	it('are chosen by state, tag and half-open time', async () => {
		const found = async (query: string) =>
			(await described(`${at}/alarms?${query}`, '/api/v1/sites/{site}/alarms')).items.map(({ id }) => id);
		expect(await found('state=closed,active-unacknowledged')).toEqual([ids[2], ids[0]]);
		expect(await found('from=2026-01-01T00:00:00Z&to=2026-01-03T00:00:00Z')).toEqual([ids[1], ids[0]]);
		expect(await found('tag=fan-2.v')).toEqual([]);
		expect(await problem(`${at}/alarms?state=red&from=yesterday`)).toMatchObject({
			errors: [{ parameter: 'state' }, { parameter: 'from' }],
		});
	});

	it('stream as CSV', async () => {
		const answer = await app.ask(`${at}/alarms`, { key, headers: { accept: 'text/csv' } });
		expect((await answer.text()).trimEnd().split('\r\n')).toHaveLength(4);
	});

	it('are acknowledged once, with an event and an entry in the log of changes', async () => {
		const template = '/api/v1/sites/{site}/alarms/{id}/acknowledge';
		const body = await described(`${at}/alarms/${ids[2]}/acknowledge`, template, { json: { note: 'on my way' } });
		expect(body).toMatchObject({ state: 'active-acknowledged', acknowledged_by: 'all', level_now: 'alert' });
		expect(await problem(`${at}/alarms/${ids[2]}/acknowledge`, { method: 'POST' })).toMatchObject({ status: 409 });
		const closed = await described(`${at}/alarms/${ids[1]}/acknowledge`, template, { method: 'POST' });
		expect(closed.state).toBe('closed');
		const events = await app.sql.query('SELECT kind, by, note FROM alarm_events WHERE alarm_id = $1', [ids[2]]);
		expect(events.rows).toEqual([{ kind: 'acknowledged', by: 'all', note: 'on my way' }]);
		const audit = await app.sql.query(
			"SELECT before, after FROM audit_entries WHERE action = 'alarm.acknowledged' ORDER BY id LIMIT 1",
		);
		expect(audit.rows).toEqual([{ before: { state: 'active-unacknowledged' }, after: { state: 'active-acknowledged' } }]);
	});

	it('that are not there, or at another site, are not found', async () => {
		expect(await problem(`${at}/alarms/999999/acknowledge`, { method: 'POST' })).toMatchObject({ status: 404 });
		expect(await problem(`${at}/alarms/none/acknowledge`, { method: 'POST' })).toMatchObject({ status: 404 });
		const other = await app.ask(`/api/v1/sites/northfen/alarms/${ids[0]}/acknowledge`, {
			key: plant.keys.foreign,
			method: 'POST',
		});
		expect(other.status).toBe(404);
	});

	it('of a tag are shelved for a while and taken back', async () => {
		const shelved = await described(`${at}/tags/PUMP1.DE.V/shelve`, '/api/v1/sites/{site}/tags/{name}/shelve', {
			json: { seconds: 3_600 },
		});
		const until = Date.parse(String(shelved.shelved_until)) - Date.now();
		expect(until).toBeGreaterThan(3_590_000);
		expect(until).toBeLessThan(3_601_000);
		const listed = await described(`${at}/alarms?state=active-acknowledged`, '/api/v1/sites/{site}/alarms');
		expect(listed.items).toMatchObject([{ shelved_until: shelved.shelved_until }]);
		const unshelve = () => app.ask(`${at}/tags/PUMP1.DE.V/unshelve`, { key, method: 'POST' });
		expect((await unshelve()).status).toBe(200);
		expect((await unshelve()).status).toBe(409);
		expect(await problem(`${at}/tags/PUMP1.DE.V/shelve`, { json: { until: '2020-01-01T00:00:00Z' } })).toMatchObject({
			errors: [{ pointer: '/until' }],
		});
	});

	it('of a tag out of service are marked with who, why and until when, and it comes back; a reason is asked for', async () => {
		const out = `${at}/tags/pump1.de.v/out-of-service`;
		const until = new Date(Date.now() + 3_600_000).toISOString();
		expect(await problem(out, { json: { until } })).toMatchObject({ errors: [{ pointer: '/note' }] });
		expect(await problem(out, { json: { until: '2020-01-01T00:00:00Z', note: 'overhaul' } })).toMatchObject({
			errors: [{ pointer: '/until' }],
		});
		const done = await described(out, '/api/v1/sites/{site}/tags/{name}/out-of-service', { json: { until, note: 'overhaul' } });
		expect(done).toEqual({ name: 'PUMP1.DE.V', tags: 1, out_of_service_until: until });
		const marked = await described(`${at}/alarms?state=active-acknowledged`, '/api/v1/sites/{site}/alarms');
		expect(marked.items).toMatchObject([{ out_of_service_until: until, out_of_service_note: 'overhaul' }]);
		const entry = await app.sql.query("SELECT note, after FROM audit_entries WHERE action = 'tag.out-of-service'");
		expect(entry.rows).toMatchObject([{ note: 'overhaul', after: { tags: 1, out_of_service_until: until } }]);
		const back = () => app.ask(`${at}/tags/PUMP1.DE.V/return-to-service`, { key, method: 'POST' });
		expect((await back()).status).toBe(200);
		expect((await back()).status).toBe(409);
	});

	it('of a machine out of service: all its published tags, those of other machines not', async () => {
		const machine = await app.sql.query<{ id: number }>(
			"INSERT INTO machines (site_id, name) VALUES ($1, 'PUMP1') RETURNING id",
			[plant.siteId],
		);
		const id = machine.rows[0]?.id;
		await app.sql.query("UPDATE tags SET machine_id = $1 WHERE name = 'PUMP1.DE.V'", [id]);
		const until = new Date(Date.now() + 3_600_000).toISOString();
		expect(
			await described(`${at}/machines/${id}/out-of-service`, '/api/v1/sites/{site}/machines/{id}/out-of-service', {
				json: { until, note: 'planned outage' },
			}),
		).toEqual({ name: 'PUMP1', tags: 1, out_of_service_until: until });
		const out = await app.sql.query(
			'SELECT t.name FROM tag_states s JOIN tags t ON t.id = s.tag_id WHERE s.out_of_service_until > now()',
		);
		expect(out.rows).toEqual([{ name: 'PUMP1.DE.V' }]);
		expect((await app.ask(`${at}/machines/${id}/return-to-service`, { key, method: 'POST' })).status).toBe(200);
		expect((await app.ask(`${at}/machines/999999/return-to-service`, { key, method: 'POST' })).status).toBe(404);
	});

	it('are found by level, machine and part of a name', async () => {
		const count = async (query: string) =>
			(await described(`${at}/alarms?${query}`, '/api/v1/sites/{site}/alarms')).items.length as number;
		expect(await count('level=alert')).toBe(1);
		expect(await count('level=danger&machine=pump1')).toBe(2);
		expect(await count('machine=pump2')).toBe(0);
		expect(await count('search=de.v')).toBe(3);
		expect(await count('search=%25')).toBe(0);
	});
});

describe('the edges of the API', () => {
	it('a body that is no JSON, or of another type, is refused in words', async () => {
		const bad = await app.ask(`${at}/limits`, { key, method: 'PUT', body: '{', headers: { 'content-type': 'application/json' } });
		expect([bad.status, (await bad.json()).errors]).toEqual([400, [{ pointer: '', detail: expect.stringContaining('JSON') }]]);
		const xml = await app.ask(`${at}/limits`, {
			key,
			method: 'PUT',
			body: '<a/>',
			headers: { 'content-type': 'application/xml' },
		});
		expect(xml.status).toBe(415);
	});

	it('an unknown address and a wrong method are problems too', async () => {
		expect(await problem('/api/v1/nothing')).toMatchObject({ status: 404, type: 'urn:millrace:problem:no-such-endpoint' });
		const wrong = await app.ask(`${at}/tags`, { key, method: 'DELETE' });
		expect([wrong.status, wrong.headers.get('content-type')]).toEqual([405, 'application/problem+json']);
	});

	it('every answer says what is left of the rate, and a burst past 400 is told when to come back', async () => {
		const quiet = await app.ask('/api/v1/sites', { key: plant.keys.read });
		expect(quiet.headers.get('ratelimit-limit')).toBe('400');
		expect(Number(quiet.headers.get('ratelimit-remaining'))).toBeLessThan(400);
		const answers = await Promise.all(
			Array.from({ length: 900 }, () => app.ask('/api/v1/nothing-to-see', { key: plant.keys.sources })),
		);
		// Only endpoints count; an address that is none does not.
		expect(new Set(answers.map((answer) => answer.status))).toEqual(new Set([404]));
		const burst = await Promise.all(Array.from({ length: 900 }, () => app.ask('/api/v1/sites', { ip: '192.0.2.99' })));
		const refused = burst.filter((answer) => answer.status === 429);
		expect(refused.length).toBeGreaterThan(100);
		expect(Number(refused[0]?.headers.get('retry-after'))).toBeGreaterThanOrEqual(1);
		expect((await app.ask('/api/v1/sites', { key })).status).toBe(200);
	});

	it('health needs no key; readiness names what is missing; metrics ask for loopback or their scope', async () => {
		expect((await app.ask('/healthz')).status).toBe(200);
		const ready = await app.ask('/readyz');
		expect(ready.status).toBe(503);
		expect((await ready.json()).checks).toMatchObject({
			database: { ok: true },
			migrations: { ok: true },
			collector: { ok: false },
		});
		await app.sql.query("INSERT INTO collectors (id, instance, host, pid) VALUES (gen_random_uuid(), 'one', 'here', 1)");
		expect((await (await app.ask('/readyz')).json()).checks.collector.ok).toBe(true);

		const far = { ip: '192.0.2.1' };
		expect((await app.ask('/metrics', far)).status).toBe(401);
		expect((await app.ask('/metrics', { ...far, key: plant.keys.read })).status).toBe(403);
		expect((await app.ask('/metrics', { headers: { 'x-forwarded-for': '192.0.2.1' } })).status).toBe(401);
		const metrics = await app.ask('/metrics', { ...far, key: plant.keys.metrics });
		expect(metrics.headers.get('content-type')).toMatch(/^application\/openmetrics-text/);
		const text = await metrics.text();
		expect(text).toMatch(/^millrace_http_requests_total\{/m);
		expect(text.match(/# EOF/g)).toHaveLength(1);
		expect((await app.ask('/metrics')).status).toBe(200);
	});

	it('answers carry the headers that keep a browser safe', async () => {
		const answer = await app.ask('/api/v1/sites', { key });
		expect(Object.fromEntries(answer.headers)).toMatchObject({
			'x-content-type-options': 'nosniff',
			'x-frame-options': 'DENY',
			'referrer-policy': 'same-origin',
			'cache-control': 'no-store',
			'x-request-id': expect.any(String),
		});
	});
});
