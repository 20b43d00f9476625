import { z } from 'zod';
import { returnToService } from '#lib/server/alarms/out-of-service.ts';
import { api } from '#lib/server/http/api.ts';
import { Problem } from '#lib/server/http/problem.ts';

export const POST = api(
	{
		summary: 'Returns every published tag of a machine to service before its time.',
		permission: 'alarms:acknowledge',
		body: z.strictObject({ note: z.string().max(2_000).nullish() }),
		bodyOptional: true,
		answer: z.object({ name: z.string(), tags: z.number().int(), out_of_service_until: z.null() }),
		refusals: [409],
	},
	async ({ pool, site, params, body, actor, ip }) => {
		const outcome = await returnToService(pool, {
			siteId: site.id,
			scope: { machineId: /^\d{1,9}$/.test(params.id) ? Number(params.id) : -1 },
			note: body.note ?? null,
			actor,
			ip,
		});
		if (outcome.ok) return { ...outcome.value, out_of_service_until: null };
		if (outcome.reason === 'in-service') throw new Problem(409, outcome.reason, 'Nothing of it is out of service.');
		throw new Problem(404, 'machine-not-found', 'This site has no machine with that id.');
	},
);
