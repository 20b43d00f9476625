// Tests. The web application as functions: real hooks, real handlers, real Request and Response, without a listening server.
import { isHttpError, isRedirect, type Cookies, type Handle, type RequestEvent } from '@sveltejs/kit';
import pg from 'pg';
import { cloneDatabase } from './cluster.ts';

type Handler = (event: RequestEvent) => Response | Promise<Response>;
type Loaded = Record<string, unknown>;

const modules = import.meta.glob<Loaded>(['../../src/routes/**/+server.ts', '../../src/routes/**/+page.server.ts']);

/** Route ids that have a server part, with their modules. */
export const ROUTES: readonly { id: string; file: string }[] = Object.keys(modules).map((file) => ({
	file,
	id: file.replace('../../src/routes', '').replace(/\/\+(page\.)?server\.ts$/, '') || '/',
}));

const ORIGIN = 'http://127.0.0.1:3000';

interface Matcher {
	id: string;
	file: string;
	pattern: RegExp;
	names: string[];
	/** Fixed parts before parameters, as Kit ranks them. */
	rank: string;
}

const matchers: Matcher[] = ROUTES.map(({ id, file }) => {
	const parts = id.split('/').filter((part) => part !== '' && !/^\(.*\)$/.test(part));
	const names = parts.flatMap((part) => [...part.matchAll(/\[(\w+)\]/g)].map((match) => match[1] ?? ''));
	const pattern = new RegExp(`^/${parts.map((part) => part.replaceAll('.', '\\.').replace(/\[\w+\]/g, '([^/]+)')).join('/')}/?$`);
	return { id, file, pattern, names, rank: parts.map((part) => (part.startsWith('[') ? '1' : '0')).join('') };
}).sort((a, b) => a.rank.localeCompare(b.rank));

/** A browser's cookie jar, just enough of it. */
export type Jar = Map<string, { value: string; options: object }>;

function cookiesOf(jar: Jar): Cookies {
	return {
		get: (name) => jar.get(name)?.value,
		getAll: () => [...jar].map(([name, { value }]) => ({ name, value })),
		set: (name, value, options) => void jar.set(name, { value, options }),
		delete: (name) => void jar.delete(name),
		serialize: (name, value) => `${name}=${value}`,
	};
}

export interface Ask extends RequestInit {
	key?: string;
	jar?: Jar;
	json?: unknown;
	form?: Record<string, string>;
	ip?: string;
	origin?: string;
}

export interface App {
	url: string;
	/** The database's owner's side, for what a test lays and looks at. */
	sql: pg.Pool;
	ask(path: string, ask?: Ask): Promise<Response>;
	close(): Promise<void>;
}

/** The application over a database of the test file's own. One a file: the web pool is the process's. */
export async function createApp(): Promise<App> {
	const database = await cloneDatabase();
	process.env.DATABASE_URL = database.url;
	process.env.MILLRACE_LOG = 'silent';
	const { handle } = await import('../../src/hooks.server.ts');
	const { closeWebPool } = await import('#lib/server/db/database.ts');
	const { closeAll } = await import('#lib/server/shutdown.ts');
	const sql = new pg.Pool({ connectionString: database.url, max: 3 });
	return {
		url: database.url,
		sql,
		ask: (path, ask = {}) => request(handle, path, ask),
		async close() {
			await sql.end();
			await closeAll();
			await closeWebPool();
			await database.drop();
		},
	};
}

async function request(handle: Handle, path: string, ask: Ask): Promise<Response> {
	const { key, jar = new Map() as Jar, json, form, ip = '127.0.0.1', origin = ORIGIN, ...init } = ask;
	const url = new URL(path, origin);
	const headers = new Headers(init.headers);
	if (key !== undefined) headers.set('authorization', `Bearer ${key}`);
	if (json !== undefined) headers.set('content-type', 'application/json');
	if (form !== undefined) headers.set('content-type', 'application/x-www-form-urlencoded');
	const body = json !== undefined ? JSON.stringify(json) : form !== undefined ? new URLSearchParams(form) : init.body;
	const method = init.method ?? (body === undefined || body === null ? 'GET' : 'POST');
	const found = matchers.find((matcher) => matcher.pattern.test(url.pathname));
	const values = found?.pattern.exec(url.pathname)?.slice(1) ?? [];
	const event = {
		url,
		request: new Request(url, { ...init, method, headers, body: body ?? null }),
		params: Object.fromEntries((found?.names ?? []).map((name, index) => [name, decodeURIComponent(values[index] ?? '')])),
		route: { id: found?.id ?? null },
		locals: {} as App.Locals,
		cookies: cookiesOf(jar),
		getClientAddress: () => ip,
		setHeaders: () => undefined,
		depends: () => undefined,
		isDataRequest: false,
		isSubRequest: false,
		isRemoteRequest: false,
		platform: undefined,
		fetch,
	} as unknown as RequestEvent;
	try {
		return await handle({ event, resolve: async () => answer(event, found) });
	} catch (thrown) {
		if (isRedirect(thrown)) return new Response(null, { status: thrown.status, headers: { location: thrown.location } });
		if (isHttpError(thrown)) return Response.json(thrown.body, { status: thrown.status });
		throw thrown;
	}
}

/** What Kit does with the module of the route. */
async function answer(event: RequestEvent, found: Matcher | undefined): Promise<Response> {
	const load = found ? modules[found.file] : undefined;
	if (!load) return new Response('Not found', { status: 404 });
	const loaded = await load();
	const { method } = event.request;
	if (found?.file.endsWith('+server.ts') && !found.file.endsWith('+page.server.ts')) {
		const handler = loaded[method] as Handler | undefined;
		if (handler) return handler(event);
		return new Response('', { status: 405, headers: { allow: Object.keys(loaded).join(', ') } });
	}
	if (method === 'POST') {
		// `?/name` is Kit's form of a named act.
		const name = [...event.url.searchParams.keys()].find((key) => key.startsWith('/'))?.slice(1) ?? 'default';
		const act = (loaded.actions as Record<string, (event: RequestEvent) => unknown> | undefined)?.[name];
		if (!act) return new Response('', { status: 405 });
		const result = (await act(event)) as { status?: number; data?: unknown } | undefined;
		return Response.json(result && 'data' in result ? result.data : (result ?? null), { status: result?.status ?? 200 });
	}
	return Response.json(((await (loaded.load as Handler | undefined)?.(event)) as unknown) ?? null);
}
