// Edge: web. Request id → identity → route rule → answer → error id. No business rule.
import { randomUUID } from 'node:crypto';
import { error, redirect, type Handle, type HandleServerError, type RequestEvent, type ServerInit } from '@sveltejs/kit';
import { can, canSeeSite } from '#lib/domain/access/can.ts';
import { readConfig } from '#lib/server/config.ts';
import { closeWebPool, webDb, webPool } from '#lib/server/db/database.ts';
import { Problem } from '#lib/server/http/problem.ts';
import { findKeyActor } from '#lib/server/identity/api-key.ts';
import { rememberPage } from '#lib/server/identity/return-page.ts';
import { findRouteRule } from '#lib/server/identity/route-rules.ts';
import { findSession, removeOldSessions } from '#lib/server/identity/session.ts';
import { log } from '#lib/server/log.ts';
import { httpDuration, httpRequests } from '#lib/server/metrics/registry.ts';
import { startOutbox } from '#lib/server/outbox/deliver.ts';
import { armShutdown, onShutdown } from '#lib/server/shutdown.ts';

/** These answer while the database does not. */
const WITHOUT_IDENTITY = new Set(['/healthz', '/readyz', '/api/v1/openapi.json']);

export const init: ServerInit = () => {
	const config = readConfig();
	armShutdown();
	onShutdown(closeWebPool);
	const outbox = startOutbox(webPool(), config);
	const cleaning = setInterval(
		() => removeOldSessions(webDb()).catch((thrown) => log.warn({ err: thrown }, 'old sessions were not removed')),
		3_600_000,
	);
	cleaning.unref();
	onShutdown(async () => {
		clearInterval(cleaning);
		await outbox.stop();
	});
};

async function identify(event: RequestEvent): Promise<void> {
	const { locals, request, cookies, url } = event;
	const authorization = request.headers.get('authorization');
	if (authorization !== null) {
		// Whoever shows a key is judged by it alone, whatever cookie comes along.
		const key = /^Bearer +(\S+)$/i.exec(authorization)?.[1];
		locals.actor = key ? await findKeyActor(webDb(), key, locals.ip) : null;
		return;
	}
	const found = await findSession(webDb(), { cookies, url });
	locals.actor = found?.person ?? null;
	locals.sessionId = found?.sessionId ?? null;
}

/** Why the route's rule does not let the request through, or null; a route without a rule lets nobody. Throws the redirect to /sign-in. */
function refusalOf(event: RequestEvent, routeId: string): { status: 403 | 404; message: string } | null {
	const rule = findRouteRule(routeId);
	if (rule === null) return { status: 403, message: 'No rule says who may see this.' };
	if (rule === 'public' || rule === 'api') return null;
	const { actor } = event.locals;
	if (actor?.kind !== 'person') {
		rememberPage(event);
		redirect(303, '/sign-in');
	}
	if (rule === 'signed-in') return null;
	const site = event.params.site ?? null;
	if (site !== null && !canSeeSite(actor, site)) return { status: 404, message: 'There is no such page.' };
	return can(actor, rule.permission, site) ? null : { status: 403, message: 'Your role does not include this.' };
}

const HEADERS: Readonly<Record<string, string>> = {
	'x-content-type-options': 'nosniff',
	'x-frame-options': 'DENY',
	// Not `no-referrer`: browsers then send `Origin: null` with our own forms.
	'referrer-policy': 'same-origin',
	'cross-origin-opener-policy': 'same-origin',
	'cross-origin-resource-policy': 'same-origin',
	'permissions-policy': 'camera=(), microphone=(), geolocation=(), payment=(), usb=()',
};

export const handle: Handle = async ({ event, resolve }) => {
	const begun = performance.now();
	event.locals.requestId = randomUUID();
	event.locals.actor = null;
	event.locals.sessionId = null;
	event.locals.ip = event.getClientAddress();
	const isApi = event.url.pathname.startsWith('/api/');
	const routeId = event.route.id;

	if (routeId !== null && !WITHOUT_IDENTITY.has(routeId)) {
		try {
			await identify(event);
		} catch (thrown) {
			log.error({ err: thrown, requestId: event.locals.requestId }, 'who asks could not be looked up');
			if (isApi)
				return finish(
					new Problem(503, 'database-unavailable', 'The database does not answer. Try again shortly.').toResponse(),
					event,
					begun,
				);
			error(503, 'The database does not answer. Try again shortly.');
		}
	}
	if (routeId === null && isApi) {
		return finish(
			new Problem(404, 'no-such-endpoint', 'There is no endpoint of that address; /api/v1/openapi.json lists them.').toResponse(),
			event,
			begun,
		);
	}
	const refusal = routeId === null ? null : refusalOf(event, routeId);
	const isReading = event.request.method === 'GET' || event.request.method === 'HEAD';
	if (refusal && !isReading) error(refusal.status, refusal.message);

	const response = await resolve(event);
	// A page refuses by itself, inside its own frame; where it should forget to, what it made is thrown away here.
	if (refusal && response.status < 400) error(refusal.status, refusal.message);
	if (isApi && response.status === 405) {
		const allow = response.headers.get('allow') ?? '';
		const problem = new Problem(405, 'method-not-allowed', `This address takes ${allow}.`, { headers: { allow } });
		return finish(problem.toResponse(), event, begun);
	}
	return finish(response, event, begun);
};

function finish(response: Response, event: RequestEvent, begun: number): Response {
	for (const [name, value] of Object.entries(HEADERS)) response.headers.set(name, value);
	response.headers.set('x-request-id', event.locals.requestId);
	if (event.url.protocol === 'https:') response.headers.set('strict-transport-security', 'max-age=31536000');
	if (!response.headers.has('cache-control')) response.headers.set('cache-control', 'private, no-store');
	const route = event.route.id ?? 'none';
	httpRequests.inc({ method: event.request.method, route, status: String(response.status) });
	httpDuration.observe({ route }, (performance.now() - begun) / 1_000);
	return response;
}

export const handleError: HandleServerError = ({ error: thrown, event, status, message }) => {
	if (status < 500) return { message };
	const errorId = randomUUID();
	log.error({ err: thrown, errorId, requestId: event.locals.requestId, path: event.url.pathname }, 'a request failed');
	return { message: 'Something broke here. It is our fault, not yours.', errorId };
};
