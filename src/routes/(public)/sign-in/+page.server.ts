import { fail, redirect } from '@sveltejs/kit';
import { z } from 'zod';
import { readConfig } from '#lib/server/config.ts';
import { webDb } from '#lib/server/db/database.ts';
import { enterAs, listDemoPeople } from '#lib/server/identity/enter-as.ts';
import { takeRememberedPage } from '#lib/server/identity/return-page.ts';
import type { Visit } from '#lib/server/identity/session.ts';
import { signIn } from '#lib/server/identity/sign-in.ts';
import type { Actions, PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals }) => ({
	/** Buttons that enter without a password; only in a demo on loopback. */
	demoPeople: await listDemoPeople(webDb(), readConfig(), locals.ip),
});

const form = z.object({
	email: z.string().max(320).default(''),
	password: z.string().max(10_000).default(''),
	as: z.string().max(100).optional(),
});

export const actions: Actions = {
	/** Fields `email` and `password`, or in a demo `as` with a person's id. */
	default: async ({ request, cookies, url, locals }) => {
		const visit: Visit = { cookies, url, ip: locals.ip, userAgent: request.headers.get('user-agent') };
		const parsed = form.safeParse(Object.fromEntries(await request.formData()));
		if (!parsed.success) return fail(400, { email: '', message: 'Give your e-mail address and your password.' });
		const { email, password, as } = parsed.data;
		if (as !== undefined) {
			const entered = await enterAs(webDb(), readConfig(), as, visit);
			if (!entered.ok)
				return fail(403, { email: '', message: 'Entering without a password is only for the demo, on this machine.' });
			redirect(303, takeRememberedPage(cookies));
		}
		if (email.trim() === '' || password === '')
			return fail(400, { email, message: 'Give your e-mail address and your password.' });
		const outcome = await signIn(webDb(), { email, password }, visit);
		if (!outcome.ok) {
			switch (outcome.reason) {
				case 'wrong':
					return fail(400, { email, message: 'No account fits this address and password.' });
				case 'too-many-attempts': {
					const minutes = Math.ceil(Number(outcome.detail) / 60);
					return fail(429, {
						email,
						message: `Too many tries. Wait ${minutes === 1 ? 'a minute' : `${minutes} minutes`}, then try again.`,
					});
				}
			}
		}
		redirect(303, takeRememberedPage(cookies));
	},
};
