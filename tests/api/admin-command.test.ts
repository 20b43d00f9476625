import { spawn } from 'node:child_process';
import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { createApp, type App, type Jar } from '../support/app.ts';

let app: App;
const folder = mkdtempSync(join(tmpdir(), 'millrace-admin-test-'));

/** The command as npm runs it, without the step that installs packages. */
const ENTRY = "import { runMain } from './src/cli/bootstrap.js'; await runMain(() => import('./src/cli/admin.ts'));";

async function admin(args: string[], input = ''): Promise<{ code: number | null; out: string; err: string }> {
	const child = spawn(process.execPath, ['--import', 'tsx', '--input-type=module', '-e', ENTRY, '--', 'admin', ...args], {
		env: { ...process.env, DATABASE_URL: app.url, MILLRACE_DATA: folder, MILLRACE_LOG: '' },
	});
	let out = '';
	let err = '';
	child.stdout.on('data', (chunk: Buffer) => (out += chunk.toString()));
	child.stderr.on('data', (chunk: Buffer) => (err += chunk.toString()));
	child.stdin.end(input);
	const code = await new Promise<number | null>((done) => child.once('close', done));
	return { code, out, err };
}

beforeAll(async () => {
	app = await createApp();
});
afterAll(async () => {
	await app.close();
	rmSync(folder, { recursive: true, force: true });
});

describe('the admin commands', () => {
	it('lay a site, a person with a password and a key, and a second time is harmless or refused', async () => {
		const site = ['site', 'add', '--slug', 'saltmere', '--name', 'Saltmere', '--time-zone', 'Europe/Berlin', '--json'];
		expect(JSON.parse((await admin(site)).out)).toMatchObject({ slug: 'saltmere', added: true });
		expect(JSON.parse((await admin(site)).out)).toMatchObject({ slug: 'saltmere', added: false });

		const user = [
			'user',
			'add',
			'--email',
			'ada@example.org',
			'--name',
			'Ada',
			'--site',
			'saltmere',
			'--role',
			'integrator',
			'--json',
		];
		const added = JSON.parse((await admin(user)).out);
		expect(added.link).toMatch(/\/invite\/[A-Za-z0-9_-]{32}$/);
		expect((await admin(user)).code).toBe(0);
		expect((await admin(['user', 'passwd', '--email', 'ada@example.org'], 'gravel lantern sixteen\n')).code).toBe(0);
		const jar: Jar = new Map();
		expect(
			(await app.ask('/sign-in', { form: { email: 'ada@example.org', password: 'gravel lantern sixteen' }, jar })).status,
		).toBe(303);

		const key = ['key', 'add', '--name', 'historian', '--site', 'saltmere', '--scopes', 'read,map,sources', '--json'];
		const made = JSON.parse((await admin(key)).out);
		expect(Object.keys(made)).toEqual(['id', 'key']);
		expect((await app.ask('/api/v1/sites/saltmere/tags', { key: made.key })).status).toBe(200);
		const again = await admin(key);
		expect([again.code, again.out]).toEqual([1, '']);
		expect(again.err).toContain('historian');

		expect((await admin(['key', 'revoke', '--name', 'historian'])).code).toBe(0);
		expect((await app.ask('/api/v1/sites/saltmere/tags', { key: made.key })).status).toBe(401);
		const { rows } = await app.sql.query(
			"SELECT DISTINCT actor_kind FROM audit_entries WHERE action IN ('site.added', 'person.invited', 'key.created')",
		);
		expect(rows).toEqual([{ actor_kind: 'command' }]);
	});

	it('refuse in one plain line what is wrong, with the value and what was expected', async () => {
		const reserved = await admin(['site', 'add', '--slug', 'admin', '--name', 'x']);
		expect([reserved.code, reserved.err.split('\n')[0]]).toEqual([1, expect.stringContaining('"admin"')]);
		const scope = await admin(['key', 'add', '--name', 'k', '--site', 'saltmere', '--scopes', 'everything']);
		expect([scope.code, scope.err]).toEqual([1, expect.stringContaining('everything')]);
		const unknown = await admin(['user', 'remove']);
		expect([unknown.code, unknown.err]).toEqual([1, expect.stringContaining('There is no command')]);
		expect(unknown.err).not.toContain('    at ');
	});

	it('a restore brings the backup back, begins a new epoch and ends sessions', async () => {
		const file = join(folder, 'one.dump');
		expect((await admin(['backup', '--file', file])).code).toBe(0);
		const before = (await app.sql.query('SELECT uid, epoch FROM installation')).rows[0];
		await app.sql.query("UPDATE sites SET name = 'changed since'");
		expect((await admin(['restore', file])).code).toBe(1);
		expect((await app.sql.query('SELECT name FROM sites')).rows).toEqual([{ name: 'changed since' }]);
		const restored = await admin(['restore', file, '--yes']);
		expect([restored.code, restored.err]).toEqual([0, '']);
		expect((await app.sql.query('SELECT name FROM sites')).rows).toEqual([{ name: 'Saltmere' }]);
		const after = (await app.sql.query('SELECT uid, epoch FROM installation')).rows[0];
		expect(after.uid).toBe(before.uid);
		expect(after.epoch).not.toBe(before.epoch);
		expect((await app.sql.query('SELECT count(*)::int AS n FROM sessions')).rows).toEqual([{ n: 0 }]);
		// The application's role still has its rights, and may still not change the log of changes.
		expect((await app.ask('/api/v1/sites')).status).toBe(401);
		await expect(app.sql.query('SET ROLE millrace_app; DELETE FROM audit_entries')).rejects.toThrow();
	});

	it('the doctor names what is wrong and exits with 1', async () => {
		const seen = await admin(['doctor', '--json']);
		expect(seen.code).toBe(1);
		const { checks } = JSON.parse(seen.out) as { checks: { check: string; ok: boolean }[] };
		expect(checks.find((one) => one.check === 'database')?.ok).toBe(true);
		expect(checks.find((one) => one.check === 'migrations')?.ok).toBe(true);
		expect(checks.find((one) => one.check === 'collector')?.ok).toBe(false);
	});
});
