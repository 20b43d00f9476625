import { describe, expect, it } from 'vitest';
import { parseRfc3339, toRfc3339 } from './rfc3339.ts';

describe('RFC 3339 times', () => {
	// The examples of RFC 3339 §5.8, seconds by hand calculation.
	it.each([
		['1985-04-12T23:20:50.52Z', 482_196_050_520],
		['1996-12-19T16:39:57-08:00', 851_042_397_000],
		['1937-01-01T12:00:27.87+00:20', Date.UTC(1937, 0, 1, 11, 40, 27, 870)],
	])('%s is the instant of the published example', (text, ms) => {
		expect(parseRfc3339(text)).toBe(ms);
	});

	it.each([
		'2026-02-30T00:00:00Z',
		'2026-01-01',
		'2026-01-01T00:00:00',
		'2026-01-01T24:00:00Z',
		'2026-13-01T00:00:00Z',
		'2026-01-01T00:00:00+24:00',
		'1735689600',
		'',
	])('"%s" is not a time', (text) => {
		expect(parseRfc3339(text)).toBeNull();
	});

	it('cuts what is finer than a millisecond', () => {
		expect(parseRfc3339('1970-01-01T00:00:00.0019999Z')).toBe(1);
	});

	it('takes the space that an unescaped plus becomes in a query for the plus', () => {
		expect(parseRfc3339('2026-01-01T02:00:00 02:00')).toBe(Date.UTC(2026, 0, 1));
	});

	it('writes UTC with milliseconds', () => {
		expect(toRfc3339(0)).toBe('1970-01-01T00:00:00.000Z');
	});
});
