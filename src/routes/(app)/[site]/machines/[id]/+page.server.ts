import { error } from '@sveltejs/kit';
import { webDb } from '#lib/server/db/database.ts';
import { findOutOfService } from '#lib/server/alarms/out-of-service.ts';
import { requireSite } from '#lib/server/identity/require.ts';
import { listFeedReaders } from '#lib/server/machines/list-feed-readers.ts';
import { listMachines } from '#lib/server/machines/machines.ts';
import type { PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals, params }) => {
	const { site } = await requireSite(locals, params.site, 'site:read');
	const [machine] = /^\d{1,9}$/.test(params.id) ? await listMachines(webDb(), site.id, Number(params.id)) : [];
	if (!machine) error(404, 'This site has no such machine.');
	const [outOfService, readers] = await Promise.all([findOutOfService(webDb(), machine.id), listFeedReaders(webDb(), site.id)]);
	return { title: machine.name, machine, outOfService, readers };
};
