import { z } from 'zod';
import { api } from '#lib/server/http/api.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { createMachine, listMachines } from '#lib/server/machines/machines.ts';
import { machineInput, machineJson } from '#lib/server/machines/machine-json.ts';

export const GET = api(
	{
		summary: 'Machines with their measuring points.',
		permission: 'site:read',
		answer: z.object({ items: z.array(machineJson), next: z.null() }),
	},
	async ({ db, site }) => ({ items: await listMachines(db, site.id), next: null }),
);

export const POST = api(
	{
		summary: 'Creates a machine.',
		permission: 'machines:edit',
		body: machineInput,
		answer: machineJson,
		status: 201,
		refusals: [409],
	},
	async ({ pool, site, body, actor, ip }) => {
		const outcome = await createMachine(pool, body, { siteId: site.id, actor, ip });
		if (!outcome.ok) throw new Problem(409, outcome.reason, `Not created: ${outcome.detail ?? outcome.reason}.`);
		return outcome.value;
	},
);
