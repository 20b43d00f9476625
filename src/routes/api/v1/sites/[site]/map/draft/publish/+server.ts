import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { publishedJson } from '#lib/server/tag-map/map-json.ts';
import { publishOrProblem } from '#lib/server/tag-map/publish-problem.ts';
import { publishDraft } from '#lib/server/tag-map/publish-draft.ts';

export const POST = api(
	{
		summary: 'Publishes the draft as the next revision, in force within 2 s.',
		permission: 'map:publish',
		body: z.strictObject({ note: z.string().trim().max(2_000), version: z.int().optional() }),
		answer: publishedJson,
		refusals: [409],
	},
	async ({ pool, site, body, actor, ip }) => publishOrProblem(await publishDraft(pool, { siteId: site.id, ...body, actor, ip })),
);
