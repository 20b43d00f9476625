import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { timeParam } from '#lib/server/http/parameters.ts';
import { badParameter, Problem } from '#lib/server/http/problem.ts';
import { healthJson } from '#lib/server/source-setup/source-schema.ts';
import { findHealth, findSource } from '#lib/server/source-setup/find-sources.ts';

const DAY_MS = 86_400_000;

export const GET = api(
	{
		summary: 'How a source is, what to check first, and its counts by minute; the last day unless a range is given.',
		permission: 'site:read',
		query: z.strictObject({ from: timeParam.optional(), to: timeParam.optional() }),
		answer: healthJson,
	},
	async ({ pool, site, params, query }) => {
		const to = query.to ?? Date.now();
		const from = query.from ?? to - DAY_MS;
		if (from >= to) throw badParameter('from', 'a time before `to`');
		const source = await findSource(pool, site.id, params.id);
		if (!source) throw new Problem(404, 'source-not-found', 'This site has no source of that id.');
		return findHealth(pool, source, { from, to });
	},
);
