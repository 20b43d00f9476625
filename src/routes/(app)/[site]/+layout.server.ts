import { requireSite } from '#lib/server/identity/require.ts';
import type { LayoutServerLoad } from './$types';

export const load: LayoutServerLoad = async ({ locals, params }) => {
	const { site } = await requireSite(locals, params.site, 'site:read');
	return { site: { slug: site.slug, name: site.name, timeZone: site.timeZone } };
};
