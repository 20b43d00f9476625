import { describe, expect, it } from 'vitest';
import { z } from 'zod';
import { decodeCursor, decodeIdCursor, encodeCursor } from './cursor.ts';
import { parameterErrors, pointerErrors } from './input.ts';

const issuesOf = (schema: z.ZodType, value: unknown) => schema.safeParse(value).error?.issues ?? [];

describe('what is wrong with a body', () => {
	it('is told by a pointer with its two signs escaped', () => {
		// RFC 6901 §3: '~' is written ~0 and '/' is written ~1.
		const schema = z.strictObject({ 'a/b': z.strictObject({ 'm~n': z.number() }) });
		expect(pointerErrors(issuesOf(schema, { 'a/b': { 'm~n': 'x' } }))).toMatchObject([{ pointer: '/a~1b/m~0n' }]);
	});

	it('names an unknown member itself, not the object around it', () => {
		expect(pointerErrors(issuesOf(z.strictObject({ rows: z.array(z.strictObject({})) }), { rows: [{ x: 1 }] }))).toMatchObject([
			{ pointer: '/rows/0/x' },
		]);
	});

	it('of the whole body has the empty pointer', () => {
		expect(pointerErrors(issuesOf(z.strictObject({}), 7))).toMatchObject([{ pointer: '' }]);
	});
});

it('an unknown query parameter is told by its name', () => {
	expect(parameterErrors(issuesOf(z.strictObject({}), { colour: 'red' }))).toMatchObject([{ parameter: 'colour' }]);
});

describe('a cursor', () => {
	it('gives back what went in, in the letters promised', () => {
		const cursor = encodeCursor(['straße/ö', 7, '']);
		expect(cursor).toMatch(/^[A-Za-z0-9._-]+$/);
		expect(decodeCursor(cursor)).toEqual(['straße/ö', 7, '']);
	});

	it.each(['', '%', 'abc', encodeCursor(['x']), encodeCursor([1, 2])])('"%s" is no cursor of one id', (text) => {
		expect(decodeIdCursor(text)).toBeNull();
	});
});
