import { error } from '@sveltejs/kit';
import { readConfig } from '#lib/server/config.ts';
import { requirePermission } from '#lib/server/identity/require.ts';
import { listDemoMails } from '#lib/server/pulse/list-demo-mails.ts';
import type { PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals }) => {
	requirePermission(locals, null, 'mail:edit');
	if (!readConfig().isDemo) error(404, 'There is no such page.');
	return { title: 'Mails of the demo', mails: await listDemoMails() };
};
