import { z } from 'zod';
import { apiOutsideSite, type ApiHandler } from '#lib/server/http/api.ts';
import { openapiOf, type Endpoint } from '#lib/server/http/openapi.ts';
import packageJson from '../../../../../package.json' with { type: 'json' };

type EndpointModule = Partial<Record<Endpoint['method'], ApiHandler>>;

/** Every endpoint's own declaration; looked up when first asked, since this module is one of them. */
const modules = import.meta.glob<EndpointModule>(['../**/+server.ts', '!./+server.ts']);

let document: Promise<Record<string, unknown>> | undefined;

async function read(): Promise<Record<string, unknown>> {
	const endpoints: Endpoint[] = [];
	for (const [file, load] of Object.entries(modules)) {
		const routeId = `/api/v1/${file.replace(/^\.\.\//, '').replace(/\/\+server\.ts$/, '')}`;
		for (const [method, handler] of Object.entries(await load())) {
			if (handler && 'declaration' in handler)
				endpoints.push({ routeId, method: method as Endpoint['method'], declaration: handler.declaration });
		}
	}
	return openapiOf(endpoints, packageJson.version);
}

export const GET = apiOutsideSite(
	{ summary: 'This description.', permission: 'public', answer: z.record(z.string(), z.unknown()) },
	async ({ headers }) => {
		document ??= read();
		headers.set('cache-control', 'no-cache');
		return document;
	},
);
