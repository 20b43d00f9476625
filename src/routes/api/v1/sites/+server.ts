import { z } from 'zod';
import { canSeeSite } from '#lib/domain/access/can.ts';
import { apiOutsideSite } from '#lib/server/http/api.ts';
import { listSites } from '#lib/server/identity/find-site.ts';

const siteJson = z.object({ slug: z.string(), name: z.string(), time_zone: z.string() });

export const GET = apiOutsideSite(
	{
		summary: 'The sites that you may see.',
		permission: 'signed-in',
		answer: z.object({ items: z.array(siteJson), next: z.null() }),
	},
	async ({ db, actor }) => ({
		items: (await listSites(db))
			.filter((site) => canSeeSite(actor, site.slug))
			.map(({ slug, name, timeZone }) => ({ slug, name, time_zone: timeZone })),
		next: null,
	}),
);
