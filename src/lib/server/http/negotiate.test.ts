import { expect, it } from 'vitest';
import { chooseType } from './negotiate.ts';

it.each([
	['nothing said is the first offered', null, 'application/json'],
	['anything is the first offered', '*/*', 'application/json'],
	['a type by its name', 'text/csv', 'text/csv'],
	['the weights decide', 'application/json;q=0.5, text/csv', 'text/csv'],
	['a browser gets JSON', 'text/html,application/xhtml+xml,application/xml;q=0.9,*/*;q=0.8', 'application/json'],
	['a refused type is not taken', 'text/csv;q=0, */*;q=0.1', 'application/json'],
	['an unknown type falls back to the first', 'image/png', 'application/json'],
])('%s', (_what, accept, type) => {
	expect(chooseType(accept, ['application/json', 'text/csv'])).toBe(type);
});
