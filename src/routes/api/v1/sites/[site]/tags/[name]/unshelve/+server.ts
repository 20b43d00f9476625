import { z } from 'zod';
import { unshelveTag } from '#lib/server/alarms/shelve.ts';
import { api } from '#lib/server/http/api.ts';
import { Problem } from '#lib/server/http/problem.ts';

export const POST = api(
	{
		summary: 'Ends the shelving of a tag before its time.',
		permission: 'alarms:acknowledge',
		body: z.strictObject({ note: z.string().max(2_000).nullish() }),
		bodyOptional: true,
		answer: z.object({ tag: z.string(), shelved_until: z.null() }),
		refusals: [409],
	},
	async ({ pool, site, params, body, actor, ip }) => {
		const outcome = await unshelveTag(pool, { siteId: site.id, tag: params.name, note: body.note ?? null, actor, ip });
		if (!outcome.ok) {
			switch (outcome.reason) {
				case 'tag-not-found':
					throw new Problem(404, outcome.reason, 'No published tag at this site has that name.');
				case 'not-shelved':
					throw new Problem(409, outcome.reason, 'This tag is not shelved.');
			}
		}
		return { tag: outcome.value.tag, shelved_until: null };
	},
);
