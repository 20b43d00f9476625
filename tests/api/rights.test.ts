import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { can, type Actor } from '#lib/domain/access/can.ts';
import { KEY_SCOPES, SITE_ROLES } from '#lib/domain/access/role.ts';
import type { Declaration } from '#lib/server/http/declaration.ts';
import { ROUTE_RULES } from '#lib/server/identity/route-rules.ts';
import { createApp, ROUTES, type App, type Ask } from '../support/app.ts';
import { layPlant, type Plant } from '../support/plant.ts';

let app: App;
let plant: Plant;

interface Endpoint {
	method: string;
	path: string;
	declaration: Declaration;
}
const endpoints: Endpoint[] = [];

const modules = import.meta.glob<Record<string, { declaration?: Declaration }>>('../../src/routes/api/v1/**/+server.ts');

beforeAll(async () => {
	app = await createApp();
	plant = await layPlant(app.sql);
	for (const [file, load] of Object.entries(modules)) {
		const route = file.replace('../../src/routes', '').replace('/+server.ts', '');
		const path = route
			.replace('[site]', 'saltmere')
			.replace('[name]', 'no-such-tag')
			.replace('[id]', '0')
			.replace('[n]', '999999');
		for (const [method, handler] of Object.entries(await load())) {
			if (handler?.declaration) endpoints.push({ method, path, declaration: handler.declaration });
		}
	}
});
afterAll(() => app.close());

/** An unknown parameter stops what is let in at 400, before it does anything. */
const probe = (path: string) => `${path}?no_such_parameter=1`;

/** A stranger to the rate limit each time would need an address of its own; the callers here are few and patient. */
async function statusOf(endpoint: Endpoint, ask: Ask): Promise<number> {
	const answer = await app.ask(probe(endpoint.path), { method: endpoint.method, ...ask });
	await answer.body?.cancel();
	return answer.status;
}

describe('every endpoint of a site', () => {
	const ofSites = () => endpoints.filter((endpoint) => endpoint.path.includes('/sites/saltmere'));

	it('is found by this test', () => {
		expect(ofSites().length).toBeGreaterThan(8);
	});

	it('names a right of the site', () => {
		expect(
			ofSites().filter(({ declaration }) => declaration.permission === 'public' || declaration.permission === 'signed-in'),
		).toEqual([]);
	});

	it('answers 401 to nobody, and to an unknown key whatever cookie comes along', async () => {
		for (const endpoint of ofSites()) {
			expect([endpoint.path, await statusOf(endpoint, {})]).toEqual([endpoint.path, 401]);
			expect([endpoint.path, await statusOf(endpoint, { key: `mr_${'x'.repeat(32)}`, jar: plant.jars.admin })]).toEqual([
				endpoint.path,
				401,
			]);
		}
	});

	it('answers 404 to who may not see the site, as if it were not there', async () => {
		for (const endpoint of ofSites()) {
			expect([endpoint.path, await statusOf(endpoint, { key: plant.keys.foreign })]).toEqual([endpoint.path, 404]);
			expect([endpoint.path, await statusOf(endpoint, { jar: plant.jars.foreign })]).toEqual([endpoint.path, 404]);
			const nowhere = { ...endpoint, path: endpoint.path.replace('saltmere', 'nowhere') };
			expect([endpoint.path, await statusOf(nowhere, { jar: plant.jars.admin })]).toEqual([endpoint.path, 404]);
		}
	});

	it.each([...SITE_ROLES, 'admin' as const])(
		'lets %s do what the table of rights says, and refuses the rest before it looks at input',
		async (role) => {
			const actor: Actor = {
				kind: 'person',
				id: '',
				name: '',
				email: '',
				isAdmin: role === 'admin',
				roles: role === 'admin' ? {} : { saltmere: role },
			};
			for (const endpoint of ofSites()) {
				const { permission } = endpoint.declaration;
				if (permission === 'public' || permission === 'signed-in') continue;
				const expected = can(actor, permission, 'saltmere') ? 400 : 403;
				const status = await statusOf(endpoint, { jar: plant.jars[role], headers: { origin: 'http://127.0.0.1:3000' } });
				expect([endpoint.method, endpoint.path, status]).toEqual([endpoint.method, endpoint.path, expected]);
			}
		},
	);

	it.each(KEY_SCOPES)('lets a key of scope %s do that and no more', async (scope) => {
		const actor: Actor = { kind: 'key', id: '', name: '', scopes: [scope], sites: ['saltmere'] };
		for (const endpoint of ofSites()) {
			const { permission } = endpoint.declaration;
			if (permission === 'public' || permission === 'signed-in') continue;
			const expected = can(actor, permission, 'saltmere') ? 400 : 403;
			expect([endpoint.method, endpoint.path, await statusOf(endpoint, { key: plant.keys[scope] })]).toEqual([
				endpoint.method,
				endpoint.path,
				expected,
			]);
		}
	});

	it('takes a change by session only from the same origin', async () => {
		for (const endpoint of ofSites().filter(({ method }) => method !== 'GET')) {
			const foreign = await statusOf(endpoint, { jar: plant.jars.admin, headers: { origin: 'https://elsewhere.example' } });
			expect([endpoint.path, foreign]).toEqual([endpoint.path, 403]);
			expect([endpoint.path, await statusOf(endpoint, { jar: plant.jars.admin })]).toEqual([endpoint.path, 403]);
		}
	});
});

describe('routes and rules', () => {
	const withPages = import.meta.glob('../../src/routes/**/+{page.svelte,page.server.ts,server.ts,page.ts}');
	const ids = new Set(
		Object.keys(withPages).map((file) => file.replace('../../src/routes', '').replace(/\/\+[a-z.]+$/, '') || '/'),
	);

	it('every route has a rule', () => {
		expect([...ids].filter((id) => !Object.hasOwn(ROUTE_RULES, id))).toEqual([]);
	});

	it('every rule has a route', () => {
		expect(Object.keys(ROUTE_RULES).filter((id) => !ids.has(id))).toEqual([]);
	});

	it('every endpoint under /api is authorised by its own declaration', () => {
		const bare = ROUTES.filter(({ id }) => id.startsWith('/api/') && !['api', 'public'].includes(String(ROUTE_RULES[id])));
		expect(bare).toEqual([]);
	});
});
