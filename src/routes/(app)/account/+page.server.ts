import { webPool } from '#lib/server/db/database.ts';
import { requirePerson } from '#lib/server/identity/require.ts';
import { listOwnSessions } from '#lib/server/pulse/list-own-sessions.ts';
import type { PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals }) => {
	const person = requirePerson(locals);
	return { title: 'Profile and sessions', sessions: await listOwnSessions(webPool(), person.id, locals.sessionId) };
};
