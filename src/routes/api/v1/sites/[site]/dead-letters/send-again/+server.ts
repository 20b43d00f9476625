import { z } from 'zod';
import { MOST_LETTERS, sendAgain } from '#lib/server/dead-letters/send-again.ts';
import { api } from '#lib/server/http/api.ts';
import { badPointer } from '#lib/server/http/problem.ts';

export const POST = api(
	{
		summary: `Stores readings that were set aside once more, by id or all of a reason, at most ${MOST_LETTERS} a request; \`left\` says how many wait.`,
		permission: 'sources:edit',
		body: z.strictObject({
			ids: z.array(z.int().min(1)).min(1).max(MOST_LETTERS).optional(),
			reason: z.string().min(1).max(200).optional(),
			after: z.int().min(0).optional(),
		}),
		answer: z.object({
			stored: z.int(),
			duplicates: z.int(),
			refused: z.record(z.string(), z.int()),
			left: z.int(),
			last_id: z.int().nullable(),
		}),
	},
	async ({ pool, site, body, actor, ip }) => {
		if (body.ids === undefined && body.reason === undefined) throw badPointer('', 'give `ids`, `reason` or both');
		return sendAgain(pool, { siteId: site.id, ...body, actor, ip, now: Date.now() });
	},
);
