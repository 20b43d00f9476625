import { z } from 'zod';
import { countLetters, letterJson, listLetters, reasonJson } from '#lib/server/dead-letters/list-letters.ts';
import { api } from '#lib/server/http/api.ts';
import { idCursorParam, limitParam } from '#lib/server/http/parameters.ts';

export const GET = api(
	{
		summary: 'Readings that could not be stored and were set aside: how many by reason, and the readings, newest first.',
		permission: 'sources:edit',
		query: z.strictObject({
			reason: z.string().min(1).max(200).optional(),
			after: idCursorParam.optional(),
			limit: limitParam(1_000, 200),
		}),
		answer: z.object({ reasons: z.array(reasonJson), items: z.array(letterJson), next: z.string().nullable() }),
	},
	async ({ pool, site, query }) => ({
		reasons: await countLetters(pool, site.id),
		...(await listLetters(pool, { ...query, siteId: site.id })),
	}),
);
