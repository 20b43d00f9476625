import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { badPointer, Problem } from '#lib/server/http/problem.ts';
import { setTestValue } from '#lib/server/test-values/set-test-value.ts';

export const POST = api(
	{
		summary: 'Lets a value stand in for a tag’s own until it ends by itself; `seconds` 0 ends one that stands.',
		permission: 'test-values:set',
		body: z.strictObject({ tag: z.string().min(1).max(120), value: z.number(), seconds: z.number().min(0).max(3_600) }),
		answer: z.object({ tag_id: z.number().int(), tag: z.string(), value: z.number(), until: z.iso.datetime() }),
		status: 201,
		refusals: [409],
	},
	async ({ pool, site, body, actor, ip }) => {
		const outcome = await setTestValue(pool, body, { siteId: site.id, actor, ip });
		if (!outcome.ok) {
			switch (outcome.reason) {
				case 'tag-not-found':
					throw badPointer('/tag', 'no published tag of this site has that name');
				case 'needs-a-person':
					throw new Problem(409, outcome.reason, `${outcome.detail ?? 'A person must confirm this'}.`);
			}
		}
		const { tagId, tag, value, until } = outcome.value;
		return { tag_id: tagId, tag, value, until };
	},
);
