import { describe, expect, test } from 'vitest';
import { parseCell, readClipboard } from './columns.ts';
import { decodeRegisters } from './plausible-reading.ts';

describe('what a spreadsheet puts on the clipboard', () => {
	test('is cells by tab and rows by line, with the last line break left out', () => {
		expect(readClipboard('a\tb\r\nc\td\r\n')).toEqual([
			['a', 'b'],
			['c', 'd'],
		]);
	});
	test('may hold tabs, line breaks and doubled quotes in a quoted cell', () => {
		expect(readClipboard('"a\tb"\t"say ""so"""\n"two\nlines"\tx')).toEqual([
			['a\tb', 'say "so"'],
			['two\nlines', 'x'],
		]);
	});
});

test('a decimal comma is a number, a word in a number column is none', () => {
	expect(parseCell('scale', '0,01')).toEqual({ ok: true, value: 0.01 });
	expect(parseCell('scale', 'ten').ok).toBe(false);
});

test('the words of the grid are taken for the words of the map', () => {
	expect(parseCell('word_order', 'low first')).toEqual({ ok: true, value: 'little' });
	expect(parseCell('table', 'input register')).toEqual({ ok: true, value: 'input-register' });
});

test('bytes are read in every common way, so that a wrong word order shows itself', () => {
	// IEEE 754: sign 0, exponent 131, fraction 0x490000: 1.5703125 × 2^4.
	const readings = decodeRegisters('41 C9 00 00');
	expect(readings.find((reading) => reading.type === 'float32' && reading.words === 'high word first')?.value).toBe(25.125);
	expect(readings.find((reading) => reading.type === 'uint16')?.value).toBe(0x41c9);
});
