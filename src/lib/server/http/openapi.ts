// Pure.
import { z } from 'zod';
import type { Declaration } from './declaration.ts';

type Json = Record<string, unknown>;
type Method = 'GET' | 'POST' | 'PUT' | 'PATCH' | 'DELETE';
export interface Endpoint {
	/** Kit's route id, e.g. `/api/v1/sites/[site]/tags`. */
	routeId: string;
	method: Method;
	declaration: Declaration;
}

const PROBLEM: Json = {
	type: 'object',
	description: 'Problem details [RFC 9457]; `type` is stable.',
	required: ['type', 'title', 'status', 'detail'],
	properties: {
		type: { type: 'string' },
		title: { type: 'string' },
		status: { type: 'integer' },
		code: { type: 'string' },
		detail: { type: 'string' },
		errors: {
			type: 'array',
			items: {
				type: 'object',
				required: ['detail'],
				properties: { pointer: { type: 'string' }, parameter: { type: 'string' }, detail: { type: 'string' } },
			},
		},
	},
};

const REFUSALS: Readonly<Record<number, string>> = {
	400: 'The input is not valid; `errors` names each place.',
	401: 'No key, or one that is unknown, revoked or over.',
	403: 'The key or role does not carry the right.',
	404: 'No such thing, or a site that you may not see.',
	409: 'Refused as things stand.',
	410: 'Older than what is kept.',
	412: 'Changed since it was read.',
	429: 'More requests than allowed; `Retry-After` says how long to wait.',
	503: 'Not available just now.',
};

function schemaOf(schema: z.ZodType, io: 'input' | 'output'): Json {
	const { $schema: _dialect, ...json } = z.toJSONSchema(schema, { io, unrepresentable: 'any' }) as Json;
	return json;
}

/** The dialect of a whole answer, for checking it against; what `describe` puts into the document. */
export function answerSchemaOf(declaration: Declaration): Json | null {
	return declaration.answer ? schemaOf(declaration.answer, 'input') : null;
}

function problemAnswer(status: number): Json {
	return {
		description: REFUSALS[status] ?? 'Refused.',
		content: { 'application/problem+json': { schema: { $ref: '#/components/schemas/Problem' } } },
	};
}

function queryParameters(declaration: Declaration): Json[] {
	if (!declaration.query) return [];
	const { properties, required } = schemaOf(declaration.query, 'input') as {
		properties?: Record<string, Json>;
		required?: string[];
	};
	return Object.entries(properties ?? {}).map(([name, schema]) => ({
		name,
		in: 'query',
		required: required?.includes(name) ?? false,
		schema,
	}));
}

function describe({ routeId, method, declaration }: Endpoint): Json {
	const isPublic = declaration.permission === 'public';
	const names = [...routeId.matchAll(/\[(\w+)\]/g)].map((match) => match[1] ?? '');
	const takesBody = declaration.body !== undefined || (declaration.bodyTypes?.length ?? 0) > 0;
	const content: Json = {};
	const schema = answerSchemaOf(declaration);
	if (schema) content['application/json'] = { schema };
	for (const type of declaration.answerTypes ?? []) content[type] = { schema: { type: 'string' } };
	const bodyContent: Json = {};
	if (declaration.body) bodyContent['application/json'] = { schema: schemaOf(declaration.body, 'input') };
	for (const type of declaration.bodyTypes ?? []) bodyContent[type] = { schema: { type: 'string' } };
	const status = declaration.status ?? 200;
	const refusals = [
		400,
		...(isPublic ? [] : [401]),
		...(names.includes('site') ? [403, 404] : []),
		...(declaration.refusals ?? []),
		429,
	];
	return {
		summary: declaration.summary,
		operationId: `${method.toLowerCase()}${routeId.replace(/^\/api\/v1/, '').replace(/[^A-Za-z0-9]+(.)?/g, (_all, next: string | undefined) => (next ?? '').toUpperCase())}`,
		...(isPublic ? { security: [] } : { 'x-permission': declaration.permission }),
		parameters: [
			...names.map((name) => ({ name, in: 'path', required: true, schema: { type: 'string' } })),
			...queryParameters(declaration),
		],
		...(takesBody ? { requestBody: { required: !declaration.bodyOptional, content: bodyContent } } : {}),
		responses: {
			[status]: { description: 'Done.', ...(Object.keys(content).length > 0 ? { content } : {}) },
			...Object.fromEntries(refusals.map((refusal) => [refusal, problemAnswer(refusal)])),
		},
	};
}

/** The OpenAPI 3.1 document of the endpoints, made of the schemas that validate. */
export function openapiOf(endpoints: readonly Endpoint[], version: string): Json {
	const paths: Record<string, Json> = {};
	for (const endpoint of [...endpoints].sort((a, b) => a.routeId.localeCompare(b.routeId))) {
		const path = endpoint.routeId.replaceAll('[', '{').replaceAll(']', '}');
		paths[path] = { ...paths[path], [endpoint.method.toLowerCase()]: describe(endpoint) };
	}
	return {
		openapi: '3.1.0',
		info: {
			title: 'Millrace',
			version,
			description:
				'Readings of machine condition, with unit, quality and time; their tags, limits, alarms, sources and map. Times are RFC 3339 UTC.',
			license: { name: 'Apache-2.0', identifier: 'Apache-2.0' },
		},
		servers: [{ url: '/' }],
		security: [{ key: [] }, { session: [] }],
		paths,
		components: {
			securitySchemes: {
				key: { type: 'http', scheme: 'bearer', description: 'A key with sites and scopes.' },
				session: {
					type: 'apiKey',
					in: 'cookie',
					name: 'millrace_session',
					description: 'A signed-in browser; changes need the same origin.',
				},
			},
			schemas: { Problem: PROBLEM },
		},
	};
}
