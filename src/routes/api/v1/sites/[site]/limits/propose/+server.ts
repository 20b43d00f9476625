import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { badInput } from '#lib/server/http/problem.ts';
import { limitJson } from '#lib/server/limits/limit-json.ts';
import { proposeForTags } from '#lib/server/limits/propose-limits.ts';
import { stretchFields, stretchOf } from '#lib/server/limits/stretch.ts';

export const POST = api(
	{
		summary:
			'Limits that tags could have, from a published zone table where one fits and from their own history; nothing is saved. A start for a qualified person: the maker and local codes come first.',
		permission: 'limits:edit',
		body: z.strictObject({ tags: z.array(z.string().min(1).max(120)).min(1).max(200), ...stretchFields }),
		answer: z.object({
			limits: z.array(limitJson),
			items: z.array(z.object({ tag: z.string(), limits: z.number().int(), reasons: z.array(z.string()) })),
		}),
	},
	async ({ pool, site, body }) => {
		const { proposals, unknown } = await proposeForTags(pool, {
			siteId: site.id,
			tags: body.tags,
			...stretchOf(body, Date.now()),
		});
		if (unknown.length > 0)
			throw badInput(
				unknown.map((name) => ({
					pointer: `/tags/${body.tags.findIndex((tag) => tag.toLowerCase() === name)}`,
					detail: `no published tag is named ${name}`,
				})),
			);
		return {
			limits: proposals.flatMap((proposal) => proposal.limits),
			items: proposals.map(({ tag, limits, reasons }) => ({ tag, limits: limits.length, reasons })),
		};
	},
);
