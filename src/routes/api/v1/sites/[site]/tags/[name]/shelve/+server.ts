import { z } from 'zod';
import { LONGEST_SHELVE_S, shelveTag } from '#lib/server/alarms/shelve.ts';
import { api } from '#lib/server/http/api.ts';
import { badPointer, Problem } from '#lib/server/http/problem.ts';
import { parseRfc3339 } from '#lib/server/http/rfc3339.ts';

/** A working shift. */
const USUAL_S = 8 * 3_600;

export const POST = api(
	{
		summary: 'Keeps the alarms of a tag quiet for a while; eight hours unless `until` or `seconds` says otherwise.',
		permission: 'alarms:acknowledge',
		body: z.strictObject({
			until: z.iso.datetime({ offset: true }).nullish(),
			seconds: z.number().int().min(1).max(LONGEST_SHELVE_S).nullish(),
			note: z.string().max(2_000).nullish(),
		}),
		bodyOptional: true,
		answer: z.object({ tag: z.string(), shelved_until: z.iso.datetime() }),
	},
	async ({ pool, site, params, body, actor, ip }) => {
		if (body.until != null && body.seconds != null) throw badPointer('/seconds', 'give `until` or `seconds`, not both');
		const now = Date.now();
		const until = body.until == null ? now + (body.seconds ?? USUAL_S) * 1_000 : parseRfc3339(body.until);
		if (until === null) throw badPointer('/until', 'an RFC 3339 time such as 2026-01-31T12:00:00.000Z');
		if (until <= now || until > now + LONGEST_SHELVE_S * 1_000) throw badPointer('/until', 'a time from now to 30 days ahead');
		const outcome = await shelveTag(pool, {
			siteId: site.id,
			tag: params.name,
			until: new Date(until),
			note: body.note ?? null,
			actor,
			ip,
		});
		if (!outcome.ok) throw new Problem(404, 'tag-not-found', 'No published tag at this site has that name.');
		return { tag: outcome.value.tag, shelved_until: outcome.value.until.toISOString() };
	},
);
