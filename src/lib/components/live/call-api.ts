// Interface. May touch: fetch, the API's answers.

/** A refusal of the API, with what it said about each field. */
export class ApiRefusal extends Error {
	readonly status: number;
	readonly type: string;
	readonly errors: { pointer?: string; parameter?: string; detail: string }[];
	readonly body: unknown;
	constructor(status: number, problem: { type?: string; title?: string; detail?: string; errors?: ApiRefusal['errors'] }) {
		super(problem.detail ?? problem.title ?? `The server answered ${status}.`);
		this.status = status;
		this.type = problem.type ?? '';
		this.errors = problem.errors ?? [];
		this.body = problem;
	}
}

/** Asks the API of one site. Throws an `ApiRefusal` with the server's own words, or says that the server cannot be reached. */
export async function callApi<T>(site: string, path: string, init: RequestInit & { json?: unknown } = {}): Promise<T> {
	return (await askApi<T>(site, path, init)).body;
}

/** As `callApi`, with the entity tag of the answer. */
export async function askApi<T>(
	site: string,
	path: string,
	init: RequestInit & { json?: unknown } = {},
): Promise<{ body: T; etag: string | null }> {
	const { json, ...rest } = init;
	const headers = new Headers(rest.headers);
	if (json !== undefined) headers.set('content-type', 'application/json');
	if (!headers.has('accept')) headers.set('accept', 'application/json');
	let response: Response;
	try {
		response = await fetch(`/api/v1/sites/${site}${path}`, {
			...rest,
			headers,
			body: json === undefined ? rest.body : JSON.stringify(json),
		});
	} catch (cause) {
		if (rest.signal?.aborted) throw cause;
		throw new Error('The server cannot be reached. What you typed is kept; try again in a moment.', { cause });
	}
	const isJson = /\bjson\b/.test(response.headers.get('content-type') ?? '');
	const body: unknown = response.status === 204 ? null : isJson ? await response.json().catch(() => null) : await response.text();
	if (!response.ok) throw new ApiRefusal(response.status, body && typeof body === 'object' ? body : {});
	return { body: body as T, etag: response.headers.get('etag') };
}

/** Reads a list to its end, page by page. */
export async function callAll<T>(site: string, path: string, signal?: AbortSignal): Promise<T[]> {
	const all: T[] = [];
	let next: string | null = null;
	do {
		const mark: string = path.includes('?') ? '&' : '?';
		const page: { items: T[]; next: string | null } = await callApi(
			site,
			next === null ? path : `${path}${mark}after=${encodeURIComponent(next)}`,
			{
				signal,
			},
		);
		all.push(...page.items);
		next = page.next ?? null;
	} while (next !== null && all.length < 60_000);
	return all;
}
