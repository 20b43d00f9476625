import { z } from 'zod';
import { limitSchema } from '#lib/domain/limit.ts';
import { api } from '#lib/server/http/api.ts';
import { idCursorParam, intParam, limitParam, namesParam } from '#lib/server/http/parameters.ts';
import { badInput } from '#lib/server/http/problem.ts';
import { limitJson } from '#lib/server/limits/limit-json.ts';
import { listLimits, readLimitRevision } from '#lib/server/limits/list-limits.ts';
import { saveLimits } from '#lib/server/limits/save-limits.ts';

export const GET = api(
	{
		summary: 'Limits as they stand, or as they stood at a revision.',
		permission: 'site:read',
		query: z.strictObject({
			tags: namesParam.optional(),
			revision: intParam(0, 2_147_483_647).optional(),
			after: idCursorParam.optional(),
			limit: limitParam(),
		}),
		answer: z.object({ limits: z.array(limitJson), revision: z.number().int(), next: z.string().nullable() }),
	},
	async ({ db, site, query }) => {
		const revision = query.revision ?? (await readLimitRevision(db, site.id));
		const page = await listLimits(db, { ...query, siteId: site.id });
		return { limits: page.items, revision, next: page.next };
	},
);

export const PUT = api(
	{
		summary: 'Replaces the limits of every tag named, as one numbered revision; `tags` names tags that are left without any.',
		permission: 'limits:edit',
		body: z.strictObject({
			limits: z.array(limitSchema).max(50_000),
			tags: z.array(z.string().min(1).max(120)).max(50_000).nullish(),
			note: z.string().max(2_000).nullish(),
		}),
		answer: z.object({ revision: z.number().int(), changed: z.array(z.string()) }),
	},
	async ({ pool, site, body, actor, ip }) => {
		const saved = await saveLimits(pool, {
			siteId: site.id,
			limits: body.limits,
			tags: body.tags ?? [],
			note: body.note ?? '',
			actor,
			ip,
		});
		if (!saved.ok) throw badInput(saved.faults.map(({ path, detail }) => ({ pointer: `/${path.join('/')}`, detail })));
		return { revision: saved.revision, changed: saved.changedTags };
	},
);
