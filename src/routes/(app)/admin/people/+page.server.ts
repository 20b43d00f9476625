import { fail } from '@sveltejs/kit';
import { z } from 'zod';
import { SITE_ROLES, type SiteRole } from '#lib/domain/access/role.ts';
import { webDb, webPool } from '#lib/server/db/database.ts';
import { requirePermission } from '#lib/server/identity/require.ts';
import { changeRoles } from '#lib/server/people/change-roles.ts';
import { disablePerson, enablePerson } from '#lib/server/people/disable-person.ts';
import { inviteAgain, invitePerson } from '#lib/server/people/invite-person.ts';
import { listPeople } from '#lib/server/people/list-people.ts';
import type { Actions, PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals }) => {
	requirePermission(locals, null, 'people:edit');
	return { title: 'People', people: await listPeople(webDb()) };
};

const REFUSALS: Record<string, string> = {
	'email-taken': 'Somebody has this address already.',
	'site-not-found': 'One of the sites is no longer there.',
	'person-not-found': 'This person is no longer there.',
	'last-admin': 'This is the last administrator; name another one first.',
	'already-taken': 'The invitation was taken up already.',
};
const said = (message: string, link: string | null = null) => ({ message, link });
const refused = (reason: string) => fail(409, said(REFUSALS[reason] ?? reason));

/** Fields `role:SITE` with a role or nothing. */
function rolesOf(data: FormData): Record<string, SiteRole> {
	const roles: Record<string, SiteRole> = {};
	for (const [name, value] of data) {
		const role = SITE_ROLES.find((candidate) => candidate === value);
		if (name.startsWith('role:') && role) roles[name.slice(5)] = role;
	}
	return roles;
}

export const actions: Actions = {
	invite: async ({ locals, request, url }) => {
		const actor = requirePermission(locals, null, 'people:edit');
		const data = await request.formData();
		const parsed = z
			.object({ name: z.string().trim().min(1).max(200), email: z.email().max(320) })
			.safeParse(Object.fromEntries(data));
		if (!parsed.success) return fail(400, said('Give a name and an e-mail address.'));
		const roles = rolesOf(data);
		const done = await invitePerson(webPool(), {
			...parsed.data,
			roles,
			isAdmin: data.has('admin'),
			origin: url.origin,
			actor,
			ip: locals.ip,
		});
		return done.ok ? said(`A letter with a link is on its way to ${parsed.data.email}.`, done.value.link) : refused(done.reason);
	},
	again: async ({ locals, request, url }) => {
		const actor = requirePermission(locals, null, 'people:edit');
		const id = String((await request.formData()).get('id') ?? '');
		const done = await inviteAgain(webPool(), id, { origin: url.origin, actor, ip: locals.ip });
		return done.ok ? said('A new letter is on its way; the old link is over.', done.value.link) : refused(done.reason);
	},
	roles: async ({ locals, request }) => {
		const actor = requirePermission(locals, null, 'people:edit');
		const data = await request.formData();
		const id = String(data.get('id') ?? '');
		const done = await changeRoles(webPool(), { id, roles: rolesOf(data), isAdmin: data.has('admin'), actor, ip: locals.ip });
		return done.ok ? said('The roles are in force.') : refused(done.reason);
	},
	disable: async ({ locals, request }) => {
		const actor = requirePermission(locals, null, 'people:edit');
		const done = await disablePerson(webPool(), String((await request.formData()).get('id') ?? ''), { actor, ip: locals.ip });
		return done.ok ? said('The account is disabled and signed out everywhere.') : refused(done.reason);
	},
	enable: async ({ locals, request }) => {
		const actor = requirePermission(locals, null, 'people:edit');
		const done = await enablePerson(webPool(), String((await request.formData()).get('id') ?? ''), { actor, ip: locals.ip });
		return done.ok ? said('The account is in use again.') : refused(done.reason);
	},
};
