import { z } from 'zod';
import { sourceInput } from '#lib/domain/source-settings.ts';
import { api } from '#lib/server/http/api.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { sourceJson, toSourceJson } from '#lib/server/source-setup/source-schema.ts';
import { listSources } from '#lib/server/source-setup/find-sources.ts';
import { createSource } from '#lib/server/source-setup/save-source.ts';

export const GET = api(
	{
		summary: 'Sources of the site, without their secrets.',
		permission: 'site:read',
		answer: z.object({ items: z.array(sourceJson), next: z.null() }),
	},
	async ({ pool, site }) => ({ items: (await listSources(pool, site.id)).map(toSourceJson), next: null }),
);

export const POST = api(
	{
		summary: 'Adds a source; a collector takes it up within two seconds.',
		permission: 'sources:edit',
		body: sourceInput,
		answer: sourceJson,
		status: 201,
		refusals: [409],
	},
	async ({ pool, site, body, actor, ip, headers }) => {
		const outcome = await createSource(pool, body, { siteId: site.id, actor, ip });
		if (!outcome.ok) throw new Problem(409, outcome.reason, `${outcome.detail ?? 'Another source stands in the way'}.`);
		headers.set('location', `/api/v1/sites/${site.slug}/sources/${outcome.value.id}`);
		return toSourceJson(outcome.value);
	},
);
