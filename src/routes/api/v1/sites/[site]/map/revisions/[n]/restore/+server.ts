import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { publishedJson } from '#lib/server/tag-map/map-json.ts';
import { publishOrProblem } from '#lib/server/tag-map/publish-problem.ts';
import { restoreRevision } from '#lib/server/tag-map/publish-draft.ts';

export const POST = api(
	{
		summary: 'Publishes the rows of an earlier revision as a new one. The draft stays as it is.',
		permission: 'map:publish',
		body: z.strictObject({ note: z.string().trim().max(2_000).optional(), convert: z.boolean().optional() }),
		bodyOptional: true,
		answer: publishedJson,
		refusals: [409],
	},
	async ({ pool, site, params, body, actor, ip }) => {
		const revision = /^\d{1,9}$/.test(params.n) ? Number(params.n) : 0;
		const note = body.note ?? `restores revision ${params.n}`;
		return publishOrProblem(
			await restoreRevision(pool, { siteId: site.id, revision, note, convert: body.convert ?? false, actor, ip }),
		);
	},
);
