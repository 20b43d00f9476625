// Tests. Two small sites with people of every role and keys of every scope, laid straight into the database.
import type pg from 'pg';
import { KEY_SCOPES, SITE_ROLES, type KeyScope, type SiteRole } from '#lib/domain/access/role.ts';
import { webDb, webPool } from '#lib/server/db/database.ts';
import { createKey } from '#lib/server/identity/api-key.ts';
import { startSession } from '#lib/server/identity/session.ts';
import { addSite } from '#lib/server/people/add-site.ts';
import { invitePerson } from '#lib/server/people/invite-person.ts';
import type { Jar } from './app.ts';

const actor = { kind: 'command', name: 'test' } as const;

export interface Plant {
	/** Site ids of `saltmere` and `northfen`. */
	siteId: number;
	otherSiteId: number;
	sourceId: string;
	/** Keys of `saltmere` by scope, and `all` with every scope; `foreign` is `northfen`'s, with every scope. */
	keys: Readonly<Record<KeyScope | 'all' | 'foreign', string>>;
	/** Browsers of `saltmere`'s people by role, of the administrator, and of `northfen`'s integrator. */
	jars: Readonly<Record<SiteRole | 'admin' | 'foreign', Jar>>;
}

async function key(name: string, site: string, scopes: readonly KeyScope[]): Promise<string> {
	const made = await createKey(webPool(), { name, sites: [site], scopes, expiresAt: null, actor, ip: null });
	if (!made.ok) throw new Error(made.reason);
	return made.value.key;
}

async function browser(name: string, roles: Record<string, SiteRole>, isAdmin = false): Promise<Jar> {
	const person = await invitePerson(webPool(), {
		email: `${name}@example.org`,
		name,
		roles,
		isAdmin,
		origin: 'http://127.0.0.1:3000',
		actor,
		ip: null,
	});
	if (!person.ok) throw new Error(person.reason);
	const jar: Jar = new Map();
	await startSession(webDb(), person.value.id, {
		cookies: {
			get: () => undefined,
			getAll: () => [],
			set: (cookie, value, options) => void jar.set(cookie, { value, options }),
			delete: () => undefined,
			serialize: () => '',
		},
		url: new URL('http://127.0.0.1:3000'),
		ip: '127.0.0.1',
		userAgent: null,
	});
	return jar;
}

/** Lays it and answers what tests need of it. */
export async function layPlant(sql: pg.Pool): Promise<Plant> {
	for (const slug of ['saltmere', 'northfen']) await addSite(webPool(), { slug, name: slug, timeZone: 'UTC', actor, ip: null });
	const sites = await sql.query<{ id: number }>("SELECT id FROM sites ORDER BY slug = 'saltmere' DESC");
	const [siteId = 0, otherSiteId = 0] = sites.rows.map((site) => site.id);
	const source = await sql.query<{ id: string }>(
		`INSERT INTO sources (site_id, name, kind, settings) VALUES ($1, 'gateway', 'modbus', '{"transport":"tcp","host":"127.0.0.1","port":15020}') RETURNING id`,
		[siteId],
	);
	const keys = {
		all: await key('all', 'saltmere', KEY_SCOPES),
		foreign: await key('foreign', 'northfen', KEY_SCOPES),
	} as Record<keyof Plant['keys'], string>;
	for (const scope of KEY_SCOPES) keys[scope] = await key(scope, 'saltmere', [scope]);
	const jars = {
		admin: await browser('admin', {}, true),
		foreign: await browser('foreign', { northfen: 'integrator' }),
	} as Record<keyof Plant['jars'], Jar>;
	for (const role of SITE_ROLES) jars[role] = await browser(role, { saltmere: role });
	return { siteId, otherSiteId, sourceId: source.rows[0]?.id ?? '', keys, jars };
}

/** Publishes a tag as the map would; answers its id. */
export async function layTag(sql: pg.Pool, siteId: number, name: string, row: Record<string, unknown> = {}): Promise<number> {
	const added = await sql.query<{ id: number }>(
		`INSERT INTO tags (site_id, name, unit, detector, quantity, source_id, row, revision, published_at)
		 VALUES ($1, $2, 'mm/s', 'rms', 'velocity', (SELECT id FROM sources WHERE site_id = $1 LIMIT 1), $3, 1, now()) RETURNING id`,
		[siteId, name, JSON.stringify({ tag: name, ...row })],
	);
	return added.rows[0]?.id ?? 0;
}
