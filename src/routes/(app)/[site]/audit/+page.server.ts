import { webDb } from '#lib/server/db/database.ts';
import { listAuditEntries } from '#lib/server/audit/list-entries.ts';
import { requireSite } from '#lib/server/identity/require.ts';
import type { PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals, params, url }) => {
	const { site } = await requireSite(locals, params.site, 'audit:read');
	const text = (name: string) => url.searchParams.get(name)?.slice(0, 200) || undefined;
	const search = text('search');
	const subjectKind = text('subject');
	const after = text('after');
	const page = await listAuditEntries(webDb(), {
		siteId: site.id,
		limit: 100,
		...(search ? { search } : {}),
		...(subjectKind ? { subjectKind } : {}),
		...(after ? { after } : {}),
	});
	return { title: 'Audit', ...page, search: search ?? '', subject: subjectKind ?? '' };
};
