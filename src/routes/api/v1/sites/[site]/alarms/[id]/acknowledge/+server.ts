import { z } from 'zod';
import { acknowledgeAlarm } from '#lib/server/alarms/acknowledge.ts';
import { alarmJson } from '#lib/server/alarms/alarm-json.ts';
import { api } from '#lib/server/http/api.ts';
import { Problem } from '#lib/server/http/problem.ts';

export const POST = api(
	{
		summary: 'Acknowledges an alarm; one whose condition has gone is closed by it.',
		permission: 'alarms:acknowledge',
		body: z.strictObject({ note: z.string().max(2_000).nullish() }),
		bodyOptional: true,
		answer: alarmJson,
		refusals: [409],
	},
	async ({ pool, site, params, body, actor, ip }) => {
		const notFound = new Problem(404, 'alarm-not-found', 'This site has no alarm of that id.');
		if (!/^\d{1,15}$/.test(params.id)) throw notFound;
		const outcome = await acknowledgeAlarm(pool, { siteId: site.id, id: Number(params.id), note: body.note ?? null, actor, ip });
		if (!outcome.ok) {
			switch (outcome.reason) {
				case 'alarm-not-found':
					throw notFound;
				case 'already-acknowledged':
					throw new Problem(409, outcome.reason, `Acknowledged already${outcome.detail ? `, by ${outcome.detail}` : ''}.`);
			}
		}
		return outcome.value;
	},
);
