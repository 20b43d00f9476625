// Edge: identity. May touch: user, session, role and key tables; cookies.
import type { Cookies, RequestEvent } from '@sveltejs/kit';

const COOKIE = 'millrace_return';

/** Keeps the page that somebody asked for before signing in; the address of the sign-in page stays the same for everybody. */
export function rememberPage({ request, url, cookies }: RequestEvent): void {
	if (request.method !== 'GET' || !request.headers.get('accept')?.includes('text/html')) return;
	cookies.set(COOKIE, url.pathname + url.search, {
		path: '/',
		httpOnly: true,
		sameSite: 'lax',
		secure: url.protocol === 'https:',
		maxAge: 600,
	});
}

/** Where to go after signing in: the page asked for, else the front page; never another origin. */
export function takeRememberedPage(cookies: Cookies): string {
	const page = cookies.get(COOKIE);
	if (page === undefined) return '/';
	cookies.delete(COOKIE, { path: '/' });
	return /^\/(?![/\\])/.test(page) &&
		URL.canParse(page, 'http://here.invalid') &&
		new URL(page, 'http://here.invalid').host === 'here.invalid'
		? page
		: '/';
}
