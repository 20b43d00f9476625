import { redirect, type RequestHandler } from '@sveltejs/kit';
import { webDb } from '#lib/server/db/database.ts';
import { forgetCookie } from '#lib/server/identity/session.ts';
import { signOut } from '#lib/server/identity/sign-in.ts';

/** A form's POST; the field `everywhere` ends all of the person's sessions. */
export const POST: RequestHandler = async ({ request, cookies, url, locals }) => {
	const isForm = /^(application\/x-www-form-urlencoded|multipart\/form-data)/.test(request.headers.get('content-type') ?? '');
	const everywhere = isForm && (await request.formData()).has('everywhere');
	if (locals.actor?.kind === 'person') await signOut(webDb(), locals.actor, locals.sessionId, { everywhere, ip: locals.ip });
	forgetCookie({ cookies, url });
	redirect(303, '/sign-in');
};
