import { fail } from '@sveltejs/kit';
import { z } from 'zod';
import { KEY_SCOPES } from '#lib/domain/access/role.ts';
import { webDb, webPool } from '#lib/server/db/database.ts';
import { createKey, listKeys, revokeKey } from '#lib/server/identity/api-key.ts';
import { requireSite } from '#lib/server/identity/require.ts';
import type { Actions, PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals, params }) => {
	const { site } = await requireSite(locals, params.site, 'keys:edit');
	return { title: 'Keys', keys: await listKeys(webDb(), site.id) };
};

const makeForm = z.object({
	name: z.string().trim().min(1, 'a name, by which the key is known').max(120),
	scopes: z.array(z.enum(KEY_SCOPES)).min(1, 'at least one'),
	expires: z.union([z.literal(''), z.iso.date()]),
});

const REFUSALS = {
	'name-taken': 'A key of this name is in use. Revoke it first, or choose another name.',
	'site-not-found': 'The site is no longer there.',
};

export const actions: Actions = {
	make: async ({ locals, params, request }) => {
		const { person, site } = await requireSite(locals, params.site, 'keys:edit');
		const data = await request.formData();
		const parsed = makeForm.safeParse({
			name: data.get('name') ?? '',
			scopes: data.getAll('scopes'),
			expires: data.get('expires') ?? '',
		});
		if (!parsed.success) {
			const errors = Object.fromEntries(parsed.error.issues.map((issue) => [String(issue.path[0]), issue.message]));
			return fail(400, { errors, made: null, message: null });
		}
		const { name, scopes, expires } = parsed.data;
		const expiresAt = expires === '' ? null : new Date(`${expires}T23:59:59Z`);
		const made = await createKey(webPool(), { name, scopes, expiresAt, sites: [site.slug], actor: person, ip: locals.ip });
		if (!made.ok)
			return fail(409, { errors: { name: REFUSALS[made.reason] } as Record<string, string>, made: null, message: null });
		return { errors: {} as Record<string, string>, made: { name, key: made.value.key }, message: null };
	},
	revoke: async ({ locals, params, request }) => {
		const { person, site } = await requireSite(locals, params.site, 'keys:edit');
		const id = z.uuid().safeParse((await request.formData()).get('id'));
		const revoked = id.success ? await revokeKey(webPool(), id.data, { actor: person, ip: locals.ip, siteId: site.id }) : null;
		if (!revoked?.ok)
			return fail(409, { errors: {} as Record<string, string>, made: null, message: 'There is no such key at this site.' });
		return {
			errors: {} as Record<string, string>,
			made: null,
			message: `${revoked.value.name} is revoked and is refused from now on.`,
		};
	},
};
