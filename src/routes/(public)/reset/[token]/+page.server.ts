import { error, fail, redirect } from '@sveltejs/kit';
import { webDb, webPool } from '#lib/server/db/database.ts';
import { findLinkPerson } from '#lib/server/identity/one-time-link.ts';
import { PASSWORD_FAULTS } from '#lib/server/identity/password-rules.ts';
import { setPasswordByLink } from '#lib/server/identity/set-password.ts';
import { beginFor } from '#lib/server/identity/sign-in.ts';
import type { Actions, PageServerLoad } from './$types';

const OVER = 'This link has been used or is over. Ask for a new one from the sign-in page.';

export const load: PageServerLoad = async ({ params }) => {
	const person = await findLinkPerson(webDb(), 'reset', params.token);
	if (!person) error(410, OVER);
	return { person: { name: person.name, email: person.email } };
};

export const actions: Actions = {
	/** Field `password`. */
	default: async ({ request, params, cookies, url, locals }) => {
		const password = String((await request.formData()).get('password') ?? '');
		const outcome = await setPasswordByLink(webPool(), 'reset', { token: params.token, password, ip: locals.ip });
		if (!outcome.ok) {
			if (outcome.reason === 'link-over') error(410, OVER);
			return fail(400, { message: PASSWORD_FAULTS[outcome.reason] });
		}
		await beginFor(webDb(), outcome.value, { cookies, url, ip: locals.ip, userAgent: request.headers.get('user-agent') });
		redirect(303, '/');
	},
};
