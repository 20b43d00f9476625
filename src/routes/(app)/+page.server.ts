import { redirect } from '@sveltejs/kit';
import { webPool, webDb } from '#lib/server/db/database.ts';
import { canSeeSite } from '#lib/domain/access/can.ts';
import { listSites } from '#lib/server/identity/find-site.ts';
import { requirePerson } from '#lib/server/identity/require.ts';
import { listNeeds } from '#lib/server/pulse/list-needs.ts';
import { readPulse } from '#lib/server/pulse/read-pulse.ts';
import type { PageServerLoad } from './$types';

/** One site: straight to its overview. Several: the same list over all of them. */
export const load: PageServerLoad = async ({ locals, url }) => {
	const actor = requirePerson(locals);
	const sites = (await listSites(webDb())).filter((site) => canSeeSite(actor, site.slug));
	const only = sites[0];
	if (sites.length === 1 && only && !url.searchParams.has('all')) redirect(303, `/${only.slug}`);
	const overview = await Promise.all(
		sites.map(async (site) => ({
			slug: site.slug,
			needs: await listNeeds(webPool(), site.id),
			pulse: await readPulse(webPool(), site.id),
		})),
	);
	return { title: 'All my sites', overview };
};
