import { webPool } from '#lib/server/db/database.ts';
import { requireSite } from '#lib/server/identity/require.ts';
import { listSourceOverviews } from '#lib/server/pulse/read-source.ts';
import type { PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals, params, depends }) => {
	const { site } = await requireSite(locals, params.site, 'site:read');
	depends('millrace:sources');
	return { title: 'Sources', sources: await listSourceOverviews(webPool(), site.id) };
};
