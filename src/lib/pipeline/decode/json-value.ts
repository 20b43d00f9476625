// Pure.
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import type { RawScalar } from '#lib/domain/reading.ts';

/** JSON's number grammar, whole text [RFC 8259 §6]: no hexadecimal, no leading zeros or plus, no blanks. */
const JSON_NUMBER = /^-?(0|[1-9]\d*)(\.\d+)?([eE][+-]?\d+)?$/;

/** What a JSON Pointer names in a document; undefined when there is nothing [RFC 6901 §4]. */
export function pointTo(document: unknown, pointer: string): unknown {
	if (pointer === '') return document;
	let here: unknown = document;
	for (const token of pointer.slice(1).split('/')) {
		const name = token.replaceAll('~1', '/').replaceAll('~0', '~');
		if (Array.isArray(here)) {
			// Array indexes have no leading zeros, and `-` names what is not there.
			if (!/^(0|[1-9]\d*)$/.test(name)) return undefined;
			here = here[Number(name)];
		} else if (here !== null && typeof here === 'object' && Object.hasOwn(here, name)) {
			here = (here as Record<string, unknown>)[name];
		} else return undefined;
	}
	return here;
}

/**
 * A raw scalar from a JSON value. Text is a number only where it is one by JSON's grammar.
 * Refusals: 'path-missing' for nothing or null, 'not-a-number-text' for other text, objects and arrays.
 */
export function jsonToScalar(value: unknown): Outcome<RawScalar, 'path-missing' | 'not-a-number-text'> {
	switch (typeof value) {
		case 'number':
		case 'boolean':
			return ok(value);
		case 'string': {
			const text = value.trim();
			if (JSON_NUMBER.test(text)) return ok(numberOrBig(text));
			return refuse('not-a-number-text', `"${value.slice(0, 60)}" found`);
		}
		default:
			return value === null || value === undefined
				? refuse('path-missing', value === null ? 'null found' : 'nothing there')
				: refuse('not-a-number-text', Array.isArray(value) ? 'a list found' : 'an object found');
	}
}

/** Whole numbers beyond 2^53 keep every digit. */
export function numberOrBig(text: string): number | bigint {
	const value = Number(text);
	return /^-?\d+$/.test(text) && !Number.isSafeInteger(value) ? BigInt(text) : value;
}

/** The whole payload as a number by JSON's grammar; null when it is none. */
export function plainNumber(text: string): number | bigint | null {
	const trimmed = text.trim();
	return JSON_NUMBER.test(trimmed) ? numberOrBig(trimmed) : null;
}
