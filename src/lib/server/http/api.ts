// Edge: http. May touch: Request, Response, URL, the web pool (to look the site up), identity.
import { randomUUID } from 'node:crypto';
import { isHttpError, isRedirect, type RequestEvent } from '@sveltejs/kit';
import type { z } from 'zod';
import { can, canSeeSite, type Actor } from '#lib/domain/access/can.ts';
import { webDb, webPool } from '#lib/server/db/database.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { findSite, type Site } from '#lib/server/identity/find-site.ts';
import { log } from '#lib/server/log.ts';
import type { Declaration } from './declaration.ts';
import { parameterErrors, pointerErrors } from './input.ts';
import { chooseType, JSON_TYPE, type AnswerType } from './negotiate.ts';
import { badInput, badPointer, Problem } from './problem.ts';
import { countRequest } from './rate-limit.ts';

/** Parameters of the API's own paths; which of them are there is what the folder says. */
export interface ApiParams {
	site: string;
	name: string;
	id: string;
	n: string;
}

export interface ApiContext<Q, B> {
	event: RequestEvent;
	request: Request;
	url: URL;
	params: ApiParams;
	/** Who asks. For a `public` endpoint see `locals.actor`. */
	actor: Actor;
	ip: string;
	query: Q;
	body: B;
	/** The type to answer in, one of JSON and the declared `answerTypes`. */
	answerType: AnswerType;
	pool: Pool;
	db: Db;
	/** Added to whatever is answered. */
	headers: Headers;
}

export type SiteContext<Q, B> = ApiContext<Q, B> & { site: Site };

/** A handler that carries its declaration, so that `openapi.json` can be made from what validates. */
export interface ApiHandler {
	(event: RequestEvent): Promise<Response>;
	declaration: Declaration;
}

type NoQuery = z.ZodObject<Record<never, never>>;
type Answer<A extends z.ZodType> = z.input<A> | Response | undefined;

/** An endpoint of one site: the declaration authorises, validates and documents; `handle` answers. */
export function api<Q extends z.ZodObject = NoQuery, B extends z.ZodType = z.ZodUndefined, A extends z.ZodType = z.ZodUndefined>(
	declaration: Declaration<Q, B, A>,
	handle: (context: SiteContext<z.output<Q>, z.output<B>>) => Promise<Answer<A>>,
): ApiHandler {
	return wrap(declaration, async (event, actor) => {
		const slug = event.params.site ?? '';
		const isPublic = declaration.permission === 'public';
		const site = actor && canSeeSite(actor, slug) ? await findSite(webDb(), slug) : null;
		if (!site || !actor || isPublic) throw new Problem(404, 'site-not-found', 'There is no site of that name that you may see.');
		if (
			declaration.permission !== 'signed-in' &&
			!can(actor, declaration.permission as Exclude<typeof declaration.permission, 'public' | 'signed-in'>, site.slug)
		) {
			throw new Problem(
				403,
				'not-allowed',
				`This needs the right ${declaration.permission}, which your ${actor.kind === 'key' ? 'key' : 'role'} does not carry.`,
			);
		}
		return (context) => handle({ ...(context as ApiContext<z.output<Q>, z.output<B>>), site });
	});
}

/** An endpoint outside any site. */
export function apiOutsideSite<
	Q extends z.ZodObject = NoQuery,
	B extends z.ZodType = z.ZodUndefined,
	A extends z.ZodType = z.ZodUndefined,
>(
	declaration: Declaration<Q, B, A> & { permission: 'signed-in' | 'public' },
	handle: (context: ApiContext<z.output<Q>, z.output<B>>) => Promise<Answer<A>>,
): ApiHandler {
	return wrap(declaration, async () => (context) => handle(context as ApiContext<z.output<Q>, z.output<B>>));
}

type Authorise = (
	event: RequestEvent,
	actor: Actor | null,
) => Promise<(context: ApiContext<unknown, unknown>) => Promise<unknown>>;

const NOBODY: Actor = { kind: 'key', id: '', name: 'nobody', scopes: [], sites: [] };

function wrap<Q extends z.ZodObject, B extends z.ZodType, A extends z.ZodType>(
	declaration: Declaration<Q, B, A>,
	authorise: Authorise,
): ApiHandler {
	const handler = async (event: RequestEvent): Promise<Response> => {
		const headers = new Headers();
		try {
			return withHeaders(await answer(event, headers), headers);
		} catch (thrown) {
			return withHeaders(problemOf(thrown, event).toResponse(), headers);
		}
	};

	const answer = async (event: RequestEvent, headers: Headers): Promise<Response> => {
		const { actor, ip } = event.locals;
		const caller = actor ? `${actor.kind} ${actor.id}` : `address ${ip}`;
		const counted = countRequest(caller);
		for (const [name, value] of Object.entries(counted.headers)) headers.set(name, value);
		if (!counted.allowed)
			throw new Problem(429, 'too-many-requests', 'More requests than are allowed; wait as Retry-After says.');

		if (declaration.permission !== 'public' && !actor) {
			throw new Problem(401, 'not-signed-in', 'This needs a key: Authorization: Bearer KEY.', {
				headers: { 'www-authenticate': 'Bearer realm="millrace"' },
			});
		}
		// Rights come before input: nobody learns from a message about input that something is there.
		const handle = await authorise(event, actor);
		if (actor?.kind === 'person') requireSameOrigin(event);

		const query = readQuery(event.url, declaration.query);
		const body = await readBody(event.request, declaration);
		const offered: [AnswerType, ...AnswerType[]] = [JSON_TYPE, ...(declaration.answerTypes ?? [])];
		const result = await handle({
			event,
			request: event.request,
			url: event.url,
			params: event.params as Partial<Record<string, string>> as unknown as ApiParams,
			actor: actor ?? NOBODY,
			ip,
			query,
			body,
			answerType: chooseType(event.request.headers.get('accept'), offered),
			pool: webPool(),
			db: webDb(),
			headers,
		});
		if (declaration.answerTypes) headers.append('vary', 'Accept');
		if (!headers.has('cache-control')) headers.set('cache-control', 'no-store');
		if (result instanceof Response) return result;
		if (declaration.status === 204) return new Response(null, { status: 204 });
		return new Response(JSON.stringify(result), { status: declaration.status ?? 200, headers: { 'content-type': JSON_TYPE } });
	};

	return Object.assign(handler, { declaration: declaration as unknown as Declaration });
}

/** A session rides on a cookie, which a browser sends from anywhere: what changes something must come from our own pages. */
function requireSameOrigin({ request, url }: RequestEvent): void {
	if (request.method === 'GET' || request.method === 'HEAD') return;
	const origin = request.headers.get('origin');
	const isOwn = origin === null ? request.headers.get('sec-fetch-site') === 'same-origin' : origin === url.origin;
	if (!isOwn)
		throw new Problem(
			403,
			'other-origin',
			'With a session, changes are taken from this installation’s own pages only. Scripts use a key.',
		);
}

function readQuery(url: URL, schema: z.ZodObject | undefined): unknown {
	const names = [...url.searchParams.keys()];
	const twice = names.filter((name, index) => names.indexOf(name) !== index);
	if (twice.length > 0) throw badInput([...new Set(twice)].map((parameter) => ({ parameter, detail: 'given more than once' })));
	if (!schema) {
		if (names.length > 0)
			throw badInput(names.map((parameter) => ({ parameter, detail: 'no parameter of that name is known here' })));
		return {};
	}
	const parsed = schema.safeParse(Object.fromEntries(url.searchParams));
	if (!parsed.success) throw badInput(parameterErrors(parsed.error.issues));
	return parsed.data;
}

async function readBody(
	request: Request,
	declaration: Pick<Declaration, 'body' | 'bodyTypes' | 'bodyOptional'>,
): Promise<unknown> {
	const type = (request.headers.get('content-type') ?? '').split(';')[0]?.trim().toLowerCase() ?? '';
	if (declaration.bodyTypes?.includes(type)) return undefined;
	if (!declaration.body) return undefined;
	const isJson = type === '' || type === JSON_TYPE || type.endsWith('+json');
	const text = await request.text();
	if (text.trim() === '' && declaration.bodyOptional) return parseBody(declaration.body, {});
	if (!isJson)
		throw new Problem(415, 'content-type', `Send ${[JSON_TYPE, ...(declaration.bodyTypes ?? [])].join(' or ')}, not ${type}.`);
	let json: unknown;
	try {
		json = JSON.parse(text);
	} catch (error) {
		throw badPointer('', text.trim() === '' ? 'a JSON body is needed' : `not JSON: ${(error as Error).message}`);
	}
	return parseBody(declaration.body, json);
}

function parseBody(schema: z.ZodType, json: unknown): unknown {
	const parsed = schema.safeParse(json);
	if (!parsed.success) throw badInput(pointerErrors(parsed.error.issues));
	return parsed.data;
}

function problemOf(thrown: unknown, event: RequestEvent): Problem {
	if (thrown instanceof Problem) return thrown;
	if (isRedirect(thrown)) return new Problem(401, 'not-signed-in', 'This needs a key or a session.');
	if (isHttpError(thrown))
		return new Problem(thrown.status, thrown.status === 404 ? 'not-found' : 'refused', thrown.body.message);
	// Kit's own error for a body above the limit is not an HttpError to `isHttpError`.
	if (thrown instanceof Error && 'status' in thrown && thrown.status === 413)
		return new Problem(413, 'too-large', thrown.message);
	const errorId = randomUUID();
	log.error({ err: thrown, errorId, requestId: event.locals.requestId, path: event.url.pathname }, 'an endpoint failed');
	return new Problem(500, 'broken', 'This is our fault, not yours. Tell the administrator the error id.', {
		extra: { error_id: errorId },
	});
}

function withHeaders(response: Response, headers: Headers): Response {
	const headed = new Response(response.body, response);
	for (const [name, value] of headers) {
		if (!headed.headers.has(name)) headed.headers.set(name, value);
	}
	return headed;
}
