import { webPool } from '#lib/server/db/database.ts';
import { requireSite } from '#lib/server/identity/require.ts';
import { listNeeds } from '#lib/server/pulse/list-needs.ts';
import { readFlow } from '#lib/server/pulse/read-flow.ts';
import type { PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals, params, depends }) => {
	const { site } = await requireSite(locals, params.site, 'site:read');
	depends('millrace:overview');
	const [needs, flow] = await Promise.all([listNeeds(webPool(), site.id), readFlow(webPool(), site.id)]);
	return { title: 'Overview', needs, flow };
};
