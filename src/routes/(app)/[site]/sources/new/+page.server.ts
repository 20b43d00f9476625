import { requirePermission } from '#lib/server/identity/require.ts';
import type { PageServerLoad } from './$types';

export const load: PageServerLoad = ({ locals, params }) => {
	requirePermission(locals, params.site, 'sources:edit');
	return { title: 'Add a source' };
};
