import { z } from 'zod';
import { LONGEST_OUT_S, takeOutOfService } from '#lib/server/alarms/out-of-service.ts';
import { api } from '#lib/server/http/api.ts';
import { badPointer, Problem } from '#lib/server/http/problem.ts';
import { parseRfc3339 } from '#lib/server/http/rfc3339.ts';

export const POST = api(
	{
		summary:
			'Takes a tag out of service until a time, for a planned outage: judged and recorded all the same, but nobody is called.',
		permission: 'alarms:acknowledge',
		body: z.strictObject({
			until: z.iso.datetime({ offset: true }),
			note: z.string().trim().min(1).max(2_000),
		}),
		answer: z.object({ name: z.string(), tags: z.number().int(), out_of_service_until: z.iso.datetime() }),
	},
	async ({ pool, site, params, body, actor, ip }) => {
		const now = Date.now();
		const until = parseRfc3339(body.until);
		if (until === null || until <= now || until > now + LONGEST_OUT_S * 1_000)
			throw badPointer('/until', 'a time from now to 400 days ahead');
		const outcome = await takeOutOfService(pool, {
			siteId: site.id,
			scope: { tag: params.name },
			until: new Date(until),
			note: body.note,
			actor,
			ip,
		});
		if (!outcome.ok) throw new Problem(404, 'tag-not-found', 'No published tag at this site has that name.');
		return { ...outcome.value, out_of_service_until: new Date(until).toISOString() };
	},
);
