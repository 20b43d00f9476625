import { readConfig } from '#lib/server/config.ts';
import { webDb } from '#lib/server/db/database.ts';
import { canSeeSite } from '#lib/domain/access/can.ts';
import { listSites } from '#lib/server/identity/find-site.ts';
import { requirePerson } from '#lib/server/identity/require.ts';
import type { LayoutServerLoad } from './$types';

export const load: LayoutServerLoad = async ({ locals }) => {
	const actor = requirePerson(locals);
	const sites = (await listSites(webDb())).filter((site) => canSeeSite(actor, site.slug));
	return { actor, isDemo: readConfig().isDemo, sites: sites.map(({ slug, name, timeZone }) => ({ slug, name, timeZone })) };
};
