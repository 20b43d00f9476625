import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { findRevision } from '#lib/server/tag-map/find-map.ts';
import { compareRevisions } from '#lib/server/tag-map/list-revisions.ts';
import { diffAnswer, diffJson } from '#lib/server/tag-map/map-json.ts';

export const GET = api(
	{
		summary: 'What stands between a revision and another one, or the newest.',
		permission: 'site:read',
		query: z.strictObject({ to: z.coerce.number().int().min(0).optional() }),
		answer: diffJson,
	},
	async ({ db, site, params, query }) => {
		const from = /^\d{1,9}$/.test(params.n) ? Number(params.n) : -1;
		const to = query.to ?? (await findRevision(db, site.id));
		const diff = await compareRevisions(db, site.id, from, to);
		if (!diff)
			throw new Problem(
				404,
				'revision-not-found',
				`This site's map has no revision ${from < 0 ? params.n : `${from} or no revision ${to}`}.`,
			);
		return diffAnswer(diff, from, to);
	},
);
