import { error } from '@sveltejs/kit';
import { webPool } from '#lib/server/db/database.ts';
import { requireSite } from '#lib/server/identity/require.ts';
import { findSourcePage } from '#lib/server/pulse/read-source.ts';
import type { PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals, params, depends }) => {
	const { site } = await requireSite(locals, params.site, 'site:read');
	depends('millrace:sources');
	const found = await findSourcePage(webPool(), site.id, params.id);
	if (!found) error(404, 'This site has no such source.');
	return { title: found.source.name, ...found };
};
