import { z } from 'zod';
import { TRACE_HOPS } from '#lib/domain/trace.ts';
import { findTrace } from '#lib/pipeline/store/find-trace.ts';
import { api } from '#lib/server/http/api.ts';
import { timeParam } from '#lib/server/http/parameters.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { findTag } from '#lib/server/tags/find-tags.ts';
import { layHops } from '#lib/server/trace/lay-hops.ts';

const shown = z.union([z.number(), z.string()]).nullable();
const time = z.iso.datetime();
const hopJson = z.object({
	hop: z.enum(TRACE_HOPS),
	label: z.string(),
	before: shown,
	after: shown,
	unit: z.string().nullable(),
	detail: z.string(),
	formula: z.string().nullable(),
	at: time.nullable(),
	captured: z.boolean(),
	mark: z.enum(['changed', 'spoiled', 'alert', 'danger']).nullable(),
});

export const GET = api(
	{
		summary: 'The way of the latest value, hop by hop, or of the stored one at or just before `at`.',
		permission: 'site:read',
		query: z.strictObject({ at: timeParam.optional() }),
		answer: z.object({
			tag: z.string(),
			at: time,
			time_from: z.enum(['source', 'hub']),
			revision: z.number().int(),
			value: z.number().nullable(),
			unit: z.string(),
			hops: z.array(hopJson),
			decodings: z.array(z.object({ words: z.string(), raw: z.number(), scaled: z.number(), value: z.number() })),
		}),
	},
	async ({ db, pool, site, params, query }) => {
		const tag = await findTag(db, site.id, params.name);
		if (!tag) throw new Problem(404, 'tag-not-found', 'No published tag at this site has that name.');
		const facts = await findTrace(pool, tag.id, query.at ?? null);
		if (!facts)
			throw new Problem(
				404,
				'no-reading',
				query.at === undefined ? 'This tag has no reading yet.' : 'This tag has no reading at or before that time.',
			);
		return layHops(facts);
	},
);
