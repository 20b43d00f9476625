// Edge: cli. May touch: server functions, the demo's data. Lays the demo plant through the same functions that people and scripts use.
import type { SiteRole } from '#lib/domain/access/role.ts';
import { SITE_ROLES } from '#lib/domain/access/role.ts';
import type { Config } from '#lib/server/config.ts';
import { createPool } from '#lib/server/db/pool.ts';
import { DEMO_DOMAIN } from '#lib/server/identity/enter-as.ts';
import { saveLimits } from '#lib/server/limits/save-limits.ts';
import { createMachine } from '#lib/server/machines/machines.ts';
import { addSite } from '#lib/server/people/add-site.ts';
import { createSource } from '#lib/server/source-setup/save-source.ts';
import { editDraft } from '#lib/server/tag-map/edit-draft.ts';
import { publishDraft } from '#lib/server/tag-map/publish-draft.ts';
import { layHistory } from './lay-history.ts';
import { demoLimits } from '#simulators/demo/demo-limits.ts';
import { demoRows, demoSites, demoSources } from '#simulators/demo/demo-map.ts';

const ROLE_WORDS: Record<SiteRole | 'admin', string> = {
	integrator: 'Integrator',
	controls: 'Controls engineer',
	maintenance: 'Maintenance planner',
	analyst: 'Vibration analyst',
	viewer: 'Viewer',
	admin: 'Administrator',
};

/** What a data folder holds: nothing yet, the demo plant, or a plant of somebody's own. */
export async function demoState(databaseUrl: string): Promise<'empty' | 'demo' | 'own'> {
	const pool = createPool(databaseUrl, { name: 'millrace-start', max: 1 });
	try {
		const found = await pool.query<{ is_demo: boolean; sites: number; people: number }>(
			'SELECT is_demo, (SELECT count(*)::int FROM sites) AS sites, (SELECT count(*)::int FROM users) AS people FROM installation',
		);
		const row = found.rows[0];
		if (row?.is_demo) return 'demo';
		return (row?.sites ?? 0) + (row?.people ?? 0) > 0 ? 'own' : 'empty';
	} finally {
		await pool.end();
	}
}

/** Lays both sites: people, machines, sources, published map and limits. The mark that this is a demo comes last, so that a lay that was cut off is seen. */
export async function layDemo(databaseUrl: string, config: Config): Promise<void> {
	const pool = createPool(databaseUrl, { name: 'millrace-start', max: 4 });
	const actor = { kind: 'command', name: 'demo' } as const;
	const done = <T>(what: string, outcome: { ok: true; value: T } | { ok: false; reason: string; detail?: string }): T => {
		if (!outcome.ok) throw new Error(`the demo could not be laid: ${what}: ${outcome.reason} ${outcome.detail ?? ''}`);
		return outcome.value;
	};
	try {
		await pool.query(`INSERT INTO users (id, email, name, is_admin) VALUES ('demo-admin', $1, $2, true) ON CONFLICT DO NOTHING`, [
			`admin${DEMO_DOMAIN}`,
			ROLE_WORDS.admin,
		]);
		for (const site of demoSites()) {
			await addSite(pool, { slug: site.slug, name: site.name, timeZone: site.timeZone, actor, ip: null });
			const found = await pool.query<{ id: number }>('SELECT id FROM sites WHERE slug = $1', [site.slug]);
			const siteId = found.rows[0]?.id ?? 0;
			const caller = { siteId, actor, ip: null };
			for (const role of SITE_ROLES) {
				const id = `demo-${site.slug}-${role}`;
				await pool.query('INSERT INTO users (id, email, name) VALUES ($1, $2, $3) ON CONFLICT DO NOTHING', [
					id,
					`${role}.${site.slug}${DEMO_DOMAIN}`,
					`${ROLE_WORDS[role]}, ${site.name}`,
				]);
				await pool.query('INSERT INTO site_roles (user_id, site_id, role) VALUES ($1, $2, $3) ON CONFLICT DO NOTHING', [
					id,
					siteId,
					role,
				]);
			}
			for (const machine of site.machines) {
				const { name, area, ...data } = machine;
				done(
					`machine ${name}`,
					await createMachine(
						pool,
						{
							name,
							area,
							data: snakeCase(data),
							points: site.points
								.filter((point) => point.machine === name)
								.map((point) => ({ name: point.name, description: point.title, data: snakeCase(point) })),
						},
						caller,
					),
				);
			}
			for (const { site: slug, source } of demoSources({
				opcua: config.simulators.opcua,
				modbus: config.simulators.modbus,
				rtu: config.simulators.rtu,
				mqtt: config.simulators.mqtt,
			})) {
				if (slug === site.slug) done(`source ${source.name}`, await createSource(pool, source, caller));
			}
			const rows = demoRows(site.slug);
			done('draft', await editDraft(pool, { siteId, mode: 'merge', rows, ifVersion: null, by: actor.name }));
			const published = await publishDraft(pool, { siteId, note: 'The demo plant', actor, ip: null });
			if (!published.ok && 'check' in published)
				throw new Error(`the demo's map is in error: ${JSON.stringify(published.check.errors.slice(0, 5))}`);
			done('publish', published);
			const limits = await saveLimits(pool, { siteId, limits: demoLimits(site.slug), note: 'The demo plant', actor, ip: null });
			if (!limits.ok) throw new Error(`the demo's limits are in error: ${JSON.stringify(limits.faults.slice(0, 5))}`);
		}
		await layHistory(pool, Date.now());
		// The plant has a day behind it: its map and limits stood since then.
		for (const [table, column] of [
			['map_revisions', 'published_at'],
			['limit_revisions', 'saved_at'],
		] as const)
			await pool.query(`UPDATE ${table} SET ${column} = ${column} - interval '1 day'`);
		await pool.query('UPDATE installation SET is_demo = true');
	} finally {
		await pool.end();
	}
}

/** Plain members of an invented machine or point as the API names them; nested ones and what has a place of its own are left out. */
function snakeCase(data: object): Record<string, string | number | boolean | null> {
	const own: Record<string, string | number | boolean | null> = {};
	for (const [key, value] of Object.entries(data)) {
		if (['site', 'machine', 'name', 'title', 'area'].includes(key)) continue;
		if (value === null || ['string', 'number', 'boolean'].includes(typeof value))
			own[key.replace(/[A-Z]/g, (letter) => `_${letter.toLowerCase()}`)] = value as string | number | boolean | null;
	}
	return own;
}
