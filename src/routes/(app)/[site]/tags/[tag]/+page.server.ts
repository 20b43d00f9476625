import { requirePermission } from '#lib/server/identity/require.ts';
import type { PageServerLoad } from './$types';

/** The page reads its tag over the API, live; here only the right is asked. */
export const load: PageServerLoad = ({ locals, params }) => {
	requirePermission(locals, params.site, 'site:read');
	return { title: params.tag, tagName: params.tag };
};
