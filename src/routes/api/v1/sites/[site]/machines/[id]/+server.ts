import { api } from '#lib/server/http/api.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { deleteMachine, updateMachine } from '#lib/server/machines/machines.ts';
import { machineChange, machineJson } from '#lib/server/machines/machine-json.ts';

/** The number in the path; -1, which no machine has, for anything else. */
const idOf = (text: string) => (/^\d{1,9}$/.test(text) ? Number(text) : -1);
const notFound = () => new Problem(404, 'machine-not-found', 'This site has no machine with that id.');

export const PATCH = api(
	{
		summary: 'Changes a machine; what is not sent stays.',
		permission: 'machines:edit',
		body: machineChange,
		answer: machineJson,
		refusals: [409],
	},
	async ({ pool, site, params, body, actor, ip }) => {
		const outcome = await updateMachine(pool, idOf(params.id), body, { siteId: site.id, actor, ip });
		if (outcome.ok) return outcome.value;
		if (outcome.reason === 'not-found') throw notFound();
		throw new Problem(409, outcome.reason, `Not changed: ${outcome.detail ?? outcome.reason}.`);
	},
);

export const DELETE = api(
	{ summary: 'Removes a machine that no published tag names.', permission: 'machines:edit', status: 204, refusals: [409] },
	async ({ pool, site, params, actor, ip }) => {
		const outcome = await deleteMachine(pool, idOf(params.id), { siteId: site.id, actor, ip });
		if (outcome.ok) return undefined;
		if (outcome.reason === 'not-found') throw notFound();
		throw new Problem(409, 'in-use', `Not removed: ${outcome.detail ?? ''}.`);
	},
);
