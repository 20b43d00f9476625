import { describe, expect, test } from 'vitest';
import { formatValue, limitText, stateWord, unitText } from './format-value.ts';

describe('a value shows no more digits than its resolution supports', () => {
	const table: [string, number, Parameters<typeof formatValue>[1], string][] = [
		['a range of 0 to 50 is told apart to hundredths', 4.512579, { low: 0, high: 50 }, '4.51'],
		['a range of 0 to 150 is told apart to tenths', 61.234, { low: 0, high: 150 }, '61.2'],
		['a step of 0.1 on the wire gives one decimal', 61.234, { step: 0.1 }, '61.2'],
		['a whole step gives none', 11.4, { step: 1 }, '11'],
		['without a range three digits count', 0.25125, null, '0.251'],
		['a minus is a minus sign, not a hyphen', -4.5, { low: -10, high: 10 }, '−4.50'],
		['what rounds to zero has no sign', -0.001, { low: 0, high: 50 }, '0.00'],
		['thousands stand apart from five digits on', 12345.6, { step: 1 }, '12,346'],
		['what decimals cannot show is a power of ten', 2.359927e-41, null, '2.36e-41'],
	];
	test.each(table)('%s', (_words, value, resolution, shown) => {
		expect(formatValue(value, resolution)).toBe(shown);
	});
});

test('a limit is shown as it was set', () => {
	expect(limitText(4.5)).toBe('4.5');
	expect(limitText(16)).toBe('16');
});

test('a unit has one spelling, with its detector in words', () => {
	expect(unitText('[in_i]/s', 'derived-peak')).toBe('in/s derived peak');
	expect(unitText('Cel', 'none')).toBe('°C');
});

test("a state's value is its word, and a value without a word is none", () => {
	expect(stateWord('0=closed;1=open', 1)).toBe('open');
	expect(stateWord('0=closed;1=open', 2)).toBeNull();
});
