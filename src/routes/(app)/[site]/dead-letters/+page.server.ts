import { webPool } from '#lib/server/db/database.ts';
import { countLetters, listLetters } from '#lib/server/dead-letters/list-letters.ts';
import { requireSite } from '#lib/server/identity/require.ts';
import type { PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals, params, url, depends }) => {
	const { site } = await requireSite(locals, params.site, 'sources:edit');
	depends('millrace:dead-letters');
	const reason = url.searchParams.get('reason') ?? undefined;
	const [reasons, page] = await Promise.all([
		countLetters(webPool(), site.id),
		listLetters(webPool(), { siteId: site.id, reason, limit: 100 }),
	]);
	return { title: 'Readings set aside', reason: reason ?? null, reasons, letters: page.items, hasMore: page.next !== null };
};
