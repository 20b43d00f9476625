import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { dryRun, MOST_ROWS } from '#lib/server/tag-map/dry-run.ts';

export const POST = api(
	{
		summary: 'Reads rows of the draft once from their live sources; stores nothing. Without tags: the changed rows.',
		permission: 'sources:test',
		body: z.strictObject({ tags: z.array(z.string().max(200)).max(MOST_ROWS).optional() }),
		bodyOptional: true,
		answer: z.object({
			items: z.array(
				z.object({
					tag: z.string(),
					value: z.number().nullable(),
					unit: z.string(),
					quality: z.object({ code: z.number(), name: z.string(), severity: z.enum(['good', 'uncertain', 'bad']) }),
					detail: z.string(),
				}),
			),
		}),
	},
	async ({ db, pool, site, body }) => ({ items: await dryRun(db, pool, site.id, body.tags) }),
);
