// Pure.
import { z } from 'zod';
import { decodeIdCursor } from './cursor.ts';
import { parseRfc3339 } from './rfc3339.ts';

/** A whole number in decimal digits, within bounds. */
export function intParam(min: number, max: number) {
	return z
		.string()
		.regex(/^\d{1,15}$/, `a whole number from ${min} to ${max}`)
		.transform(Number)
		.refine((value) => value >= min && value <= max, `a whole number from ${min} to ${max}`);
}

/** How many items a page holds. */
export function limitParam(most = 10_000, usual = 1_000) {
	return intParam(1, most).default(usual);
}

/** An RFC 3339 time, as milliseconds since the epoch. */
export const timeParam = z.string().transform((text, ctx) => {
	const ms = parseRfc3339(text);
	if (ms !== null) return ms;
	ctx.addIssue({ code: 'custom', message: 'an RFC 3339 time such as 2026-01-31T12:00:00.000Z' });
	return z.NEVER;
});

/** Cursor of a list that pages by one id, as that id. */
export const idCursorParam = z.string().transform((text, ctx) => {
	const id = decodeIdCursor(text);
	if (id !== null) return id;
	ctx.addIssue({ code: 'custom', message: 'not a cursor of this list' });
	return z.NEVER;
});

export const boolParam = z.enum(['true', 'false']).transform((text) => text === 'true');

/** Names separated by commas, each once. */
export const namesParam = z
	.string()
	.min(1, 'at least one name')
	.transform((text) => [
		...new Set(
			text
				.split(',')
				.map((name) => name.trim())
				.filter((name) => name !== ''),
		),
	])
	.refine((names) => names.length > 0, 'at least one name')
	.refine((names) => names.length <= 10_000, 'at most 10,000 names');
