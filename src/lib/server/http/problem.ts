// Edge: http. May touch: Request, Response, URL. Not: database.
import type { InputError } from './input.ts';

export type { InputError };

export interface ProblemOptions {
	errors?: readonly InputError[];
	/** Members of the answer beside the standard ones, snake_case. */
	extra?: Readonly<Record<string, unknown>>;
	headers?: Readonly<Record<string, string>>;
	cause?: unknown;
}

const TITLES: Readonly<Record<number, string>> = {
	400: 'The request is not valid',
	401: 'Not signed in',
	403: 'Not allowed',
	404: 'Not found',
	405: 'Method not allowed',
	409: 'Refused as things stand',
	410: 'Gone',
	412: 'Changed meanwhile',
	413: 'Too large',
	415: 'Content type not understood',
	429: 'Too many requests',
	500: 'Something broke here',
	503: 'Not available just now',
};

/** A refusal as the API says it: problem details [RFC 9457]. Thrown anywhere under `api`, which turns it into the answer. */
export class Problem extends Error {
	readonly status: number;
	/** Kebab-case and stable; the end of `type`. */
	readonly code: string;
	readonly options: ProblemOptions;

	constructor(status: number, code: string, detail: string, options: ProblemOptions = {}) {
		super(detail, { cause: options.cause });
		this.name = 'Problem';
		this.status = status;
		this.code = code;
		this.options = options;
	}

	/** The answer; `application/problem+json` whatever was asked for. */
	toResponse(): Response {
		const body = {
			type: `urn:millrace:problem:${this.code}`,
			title: TITLES[this.status] ?? 'Refused',
			status: this.status,
			code: this.code,
			detail: this.message,
			...(this.options.errors ? { errors: this.options.errors } : {}),
			...this.options.extra,
		};
		return new Response(JSON.stringify(body), {
			status: this.status,
			headers: { 'content-type': 'application/problem+json', 'cache-control': 'no-store', ...this.options.headers },
		});
	}
}

/** 400 with every place that is wrong. */
export function badInput(errors: readonly InputError[]): Problem {
	const places = errors.map((error) => ('pointer' in error ? error.pointer || 'the body' : error.parameter));
	return new Problem(400, 'bad-input', `Not valid: ${places.slice(0, 5).join(', ')}${places.length > 5 ? ' and more' : ''}.`, {
		errors,
	});
}

/** 400 for one query parameter. */
export function badParameter(parameter: string, detail: string): Problem {
	return badInput([{ parameter, detail }]);
}

/** 400 for one place in the body. */
export function badPointer(pointer: string, detail: string): Problem {
	return badInput([{ pointer, detail }]);
}
