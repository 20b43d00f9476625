import { fail } from '@sveltejs/kit';
import { webPool } from '#lib/server/db/database.ts';
import { askForReset } from '#lib/server/identity/set-password.ts';
import type { Actions } from './$types';

export const actions: Actions = {
	/** Field `email`. The answer is the same whether or not somebody has that address. */
	default: async ({ request, url, locals }) => {
		const email = String((await request.formData()).get('email') ?? '').trim();
		if (!/^[^\s@]+@[^\s@]+$/.test(email) || email.length > 320)
			return fail(400, { email, sent: false, message: 'Give the e-mail address you sign in with.' });
		const outcome = await askForReset(webPool(), { email, origin: url.origin, ip: locals.ip });
		if (!outcome.ok) return fail(429, { email, sent: false, message: 'Too many letters were asked for. Try again in an hour.' });
		return { email, sent: true, message: null };
	},
};
