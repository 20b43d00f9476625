import { can } from '#lib/domain/access/can.ts';
import { webPool } from '#lib/server/db/database.ts';
import { countLetters } from '#lib/server/dead-letters/list-letters.ts';
import { requireSite } from '#lib/server/identity/require.ts';
import { listSourceOverviews } from '#lib/server/pulse/read-source.ts';
import type { PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals, params, depends }) => {
	const { person, site } = await requireSite(locals, params.site, 'site:read');
	depends('millrace:sources');
	const mayEdit = can(person, 'sources:edit', site.slug);
	const [sources, letters] = await Promise.all([
		listSourceOverviews(webPool(), site.id),
		mayEdit ? countLetters(webPool(), site.id) : [],
	]);
	return { title: 'Sources', sources, setAside: letters.reduce((sum, { count }) => sum + count, 0) };
};
