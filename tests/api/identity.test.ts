import { createHash } from 'node:crypto';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { readConfig } from '#lib/server/config.ts';
import { webDb, webPool } from '#lib/server/db/database.ts';
import { createKey, revokeKey } from '#lib/server/identity/api-key.ts';
import { isDemoEntryOpen } from '#lib/server/identity/enter-as.ts';
import { setPasswordOf } from '#lib/server/identity/set-password.ts';
import { addSite } from '#lib/server/people/add-site.ts';
import { changeRoles } from '#lib/server/people/change-roles.ts';
import { disablePerson } from '#lib/server/people/disable-person.ts';
import { invitePerson } from '#lib/server/people/invite-person.ts';
import { createApp, type App, type Jar } from '../support/app.ts';

const actor = { kind: 'command', name: 'test' } as const;
const PASSWORD = 'gravel lantern sixteen';
let app: App;

async function person(
	email: string,
	options: { isAdmin?: boolean; password?: string | null } = {},
): Promise<{ id: string; link: string }> {
	const invited = await invitePerson(webPool(), {
		email,
		name: email.split('@')[0] ?? email,
		roles: options.isAdmin ? {} : { saltmere: 'viewer' },
		isAdmin: options.isAdmin ?? false,
		origin: 'http://127.0.0.1:3000',
		actor,
		ip: null,
	});
	if (!invited.ok) throw new Error(invited.reason);
	if (options.password !== null) await setPasswordOf(webPool(), { email, password: options.password ?? PASSWORD, actor });
	return invited.value;
}

async function signedIn(email: string): Promise<Jar> {
	const jar: Jar = new Map();
	const answer = await app.ask('/sign-in', { form: { email, password: PASSWORD }, jar });
	expect(answer.status).toBe(303);
	return jar;
}

beforeAll(async () => {
	app = await createApp();
	await addSite(webPool(), { slug: 'saltmere', name: 'Saltmere', timeZone: 'Europe/Berlin', actor, ip: null });
});
afterAll(() => app.close());

describe('signing in', () => {
	it('sets a cookie whose token the database knows only by its SHA-256', async () => {
		await person('ada@example.org');
		const jar = await signedIn('ada@example.org');
		const token = jar.get('millrace_session')?.value ?? '';
		expect(token).toMatch(/^[A-Za-z0-9_-]{32}$/);
		const { rows } = await app.sql.query('SELECT id FROM sessions');
		expect(rows.map((row) => row.id)).toEqual([createHash('sha256').update(token).digest('hex')]);
		const options = jar.get('millrace_session')?.options;
		expect(options).toMatchObject({ httpOnly: true, sameSite: 'lax', path: '/', secure: false });
	});

	it('binds the cookie to the host where the origin is https', async () => {
		const jar: Jar = new Map();
		await app.ask('/sign-in', {
			form: { email: 'ada@example.org', password: PASSWORD },
			jar,
			origin: 'https://millrace.example',
		});
		expect(jar.get('__Host-millrace_session')?.options).toMatchObject({ secure: true, path: '/' });
	});

	it('begins a new session each time and ends the one before', async () => {
		const jar = await signedIn('ada@example.org');
		const first = jar.get('millrace_session')?.value;
		await app.ask('/sign-in', { form: { email: 'ADA@example.org', password: PASSWORD }, jar });
		expect(jar.get('millrace_session')?.value).not.toBe(first);
		const old: Jar = new Map([['millrace_session', { value: first ?? '', options: {} }]]);
		expect((await app.ask('/api/v1/sites', { jar: old })).status).toBe(401);
		expect((await app.ask('/api/v1/sites', { jar })).status).toBe(200);
	});

	it('says the same of a wrong password and of an unknown address', async () => {
		const wrong = await app.ask('/sign-in', { form: { email: 'ada@example.org', password: 'not this one' } });
		const unknown = await app.ask('/sign-in', { form: { email: 'nobody@example.org', password: 'not this one' } });
		expect(wrong.status).toBe(400);
		expect((await wrong.json()).message).toBe((await unknown.json()).message);
	});

	it('stops a guesser after ten tries, without stopping the owner elsewhere', async () => {
		await person('bea@example.org');
		const statuses: number[] = [];
		for (let n = 0; n < 11; n += 1) {
			statuses.push(
				(await app.ask('/sign-in', { form: { email: 'bea@example.org', password: 'guess' }, ip: '192.0.2.7' })).status,
			);
		}
		expect(statuses).toEqual([...Array<number>(10).fill(400), 429]);
		expect((await app.ask('/sign-in', { form: { email: 'bea@example.org', password: PASSWORD }, ip: '192.0.2.7' })).status).toBe(
			429,
		);
		expect((await app.ask('/sign-in', { form: { email: 'bea@example.org', password: PASSWORD }, ip: '192.0.2.8' })).status).toBe(
			303,
		);
	});

	it('stores argon2id with the parameters of the OWASP guide', async () => {
		const { rows } = await app.sql.query("SELECT password_hash FROM users WHERE email = 'ada@example.org'");
		expect(rows[0].password_hash).toMatch(/^\$argon2id\$v=19\$m=19456,t=2,p=1\$/);
	});
});

describe('signing out', () => {
	it('ends the session on the server', async () => {
		const jar = await signedIn('ada@example.org');
		const kept: Jar = new Map(jar);
		const answer = await app.ask('/sign-out', { form: {}, jar });
		expect([answer.status, answer.headers.get('location')]).toEqual([303, '/sign-in']);
		expect(jar.has('millrace_session')).toBe(false);
		expect((await app.ask('/api/v1/sites', { jar: kept })).status).toBe(401);
	});

	it('everywhere ends the sessions of other browsers too', async () => {
		const here = await signedIn('ada@example.org');
		const there = await signedIn('ada@example.org');
		await app.ask('/sign-out', { form: { everywhere: 'on' }, jar: here });
		expect((await app.ask('/api/v1/sites', { jar: there })).status).toBe(401);
	});
});

describe('links', () => {
	it('an invitation works once and refuses an obvious password without being used up', async () => {
		const { link } = await person('cem@example.org', { password: null });
		const path = new URL(link).pathname;
		expect((await (await app.ask(path)).json()).person.email).toBe('cem@example.org');
		expect((await app.ask(path, { form: { password: 'Password1' } })).status).toBe(400);
		expect((await app.ask(path, { form: { password: PASSWORD } })).status).toBe(303);
		expect((await app.ask(path, { form: { password: PASSWORD } })).status).toBe(410);
		await signedIn('cem@example.org');
	});

	it('a reset answers alike for everybody, sends a letter only to who exists, and ends old sessions', async () => {
		const jar = await signedIn('cem@example.org');
		const known = await app.ask('/reset', { form: { email: 'cem@example.org' } });
		const unknown = await app.ask('/reset', { form: { email: 'who@example.org' } });
		expect([known.status, (await known.json()).sent]).toEqual([unknown.status, (await unknown.json()).sent]);
		const { rows } = await app.sql.query("SELECT target, payload FROM outbox WHERE payload->>'subject' LIKE 'Set a new%'");
		expect(rows).toHaveLength(1);
		const path = /\/reset\/\S+/.exec(rows[0].payload.text)?.[0] ?? '';
		const { rows: tokens } = await app.sql.query("SELECT id FROM one_time_tokens WHERE kind = 'reset'");
		expect(tokens[0].id).toBe(createHash('sha256').update(path.slice('/reset/'.length)).digest('hex'));
		expect((await app.ask(path, { form: { password: 'another lantern seventeen' } })).status).toBe(303);
		expect((await app.ask('/api/v1/sites', { jar })).status).toBe(401);
		expect((await app.ask(path)).status).toBe(410);
	});

	it('a link past its time is over', async () => {
		const { link } = await person('dov@example.org', { password: null });
		await app.sql.query("UPDATE one_time_tokens SET expires_at = now() - interval '1 second'");
		expect((await app.ask(new URL(link).pathname)).status).toBe(410);
	});
});

describe('people', () => {
	it('a disabled person is out at once and cannot come back', async () => {
		const { id } = await person('eli@example.org');
		const jar = await signedIn('eli@example.org');
		expect(await disablePerson(webPool(), id, { actor, ip: null })).toEqual({ ok: true, value: null });
		expect((await app.ask('/api/v1/sites', { jar })).status).toBe(401);
		expect((await app.ask('/sign-in', { form: { email: 'eli@example.org', password: PASSWORD } })).status).toBe(400);
	});

	it('the last administrator can be neither disabled nor demoted', async () => {
		const { id } = await person('root@example.org', { isAdmin: true });
		expect(await disablePerson(webPool(), id, { actor, ip: null })).toMatchObject({ ok: false, reason: 'last-admin' });
		expect(await changeRoles(webPool(), { id, roles: {}, isAdmin: false, actor, ip: null })).toMatchObject({
			reason: 'last-admin',
		});
	});

	it('a change of roles is in force with the next request and stands in the log of changes', async () => {
		const { id } = await person('fay@example.org');
		const jar = await signedIn('fay@example.org');
		expect((await (await app.ask('/api/v1/sites', { jar })).json()).items).toHaveLength(1);
		await changeRoles(webPool(), { id, roles: {}, isAdmin: false, actor, ip: '127.0.0.1' });
		expect((await (await app.ask('/api/v1/sites', { jar })).json()).items).toHaveLength(0);
		const { rows } = await app.sql.query(
			"SELECT before, after, actor_name FROM audit_entries WHERE action = 'person.roles-changed'",
		);
		expect(rows).toEqual([
			{ before: { admin: false, roles: { saltmere: 'viewer' } }, after: { admin: false, roles: {} }, actor_name: 'test' },
		]);
	});
});

describe('keys', () => {
	it('are stored hashed, note their use, and end when revoked', async () => {
		const made = await createKey(webPool(), {
			name: 'historian',
			sites: ['saltmere'],
			scopes: ['read'],
			expiresAt: null,
			actor,
			ip: null,
		});
		if (!made.ok) throw new Error(made.reason);
		expect(made.value.key).toMatch(/^mr_[A-Za-z0-9_-]{32}$/);
		const { rows } = await app.sql.query('SELECT key_hash, last_used_at FROM api_keys');
		expect(rows).toEqual([{ key_hash: createHash('sha256').update(made.value.key).digest('hex'), last_used_at: null }]);
		expect((await app.ask('/api/v1/sites', { key: made.value.key })).status).toBe(200);
		expect((await app.sql.query('SELECT last_used_at FROM api_keys')).rows[0].last_used_at).not.toBeNull();
		await revokeKey(webPool(), made.value.id, { actor, ip: null });
		expect((await app.ask('/api/v1/sites', { key: made.value.key })).status).toBe(401);
	});

	it('past their time are refused', async () => {
		const made = await createKey(webPool(), {
			name: 'short',
			sites: ['saltmere'],
			scopes: ['read'],
			expiresAt: new Date(Date.now() - 1_000),
			actor,
			ip: null,
		});
		if (!made.ok) throw new Error(made.reason);
		expect((await app.ask('/api/v1/sites', { key: made.value.key })).status).toBe(401);
	});

	it('are refused a second time under one name', async () => {
		const again = () =>
			createKey(webPool(), { name: 'twice', sites: ['saltmere'], scopes: ['read'], expiresAt: null, actor, ip: null });
		expect((await again()).ok).toBe(true);
		expect(await again()).toMatchObject({ ok: false, reason: 'name-taken' });
	});

	it('never appear in the log of changes', async () => {
		const { rows } = await app.sql.query('SELECT row_to_json(a)::text AS entry FROM audit_entries a');
		expect(rows.length).toBeGreaterThan(5);
		for (const { entry } of rows) expect(entry).not.toMatch(/mr_[A-Za-z0-9_-]{32}|argon2/);
	});
});

describe('entering a demo', () => {
	const demo = { isDemo: true, host: '127.0.0.1' };
	it.each([
		['a demo on loopback', demo, '127.0.0.1', true],
		['a demo seen from elsewhere', demo, '192.0.2.1', false],
		['a demo served to the network', { isDemo: true, host: '0.0.0.0' }, '127.0.0.1', false],
		['a real installation', { isDemo: false, host: '127.0.0.1' }, '127.0.0.1', false],
	])('%s: offered is %s', (_what, config, ip, isOpen) => {
		expect(isDemoEntryOpen(config, ip)).toBe(isOpen);
	});

	it('is refused where the installation is no demo', async () => {
		expect(readConfig().isDemo).toBe(false);
		const { rows } = await app.sql.query("SELECT id FROM users WHERE email = 'ada@example.org'");
		expect((await app.ask('/sign-in', { form: { as: rows[0].id } })).status).toBe(403);
	});
});

it('the front page without a session leads to the sign-in page', async () => {
	const answer = await app.ask('/saltmere/pulse', { headers: { accept: 'text/html' } });
	expect([answer.status, answer.headers.get('location')]).toEqual([303, '/sign-in']);
	expect(webDb()).toBeDefined();
});
