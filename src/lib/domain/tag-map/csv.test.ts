import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { csvToRows, mapToCsv, neutralise, restoreText } from './csv.ts';
import { tidyRow } from './draft.ts';
import type { MapRow } from './row.ts';

const bytes = (...parts: (string | number[])[]) =>
	Uint8Array.from(parts.flatMap((part) => (typeof part === 'string' ? [...new TextEncoder().encode(part)] : part)));

describe('reading a map from CSV', () => {
	it('takes UTF-8 with a byte order mark, CRLF and quoted cells [RFC 4180 §2]', () => {
		const read = csvToRows(bytes([0xef, 0xbb, 0xbf], 'tag,description,scale\r\nA.1,"hall ""B"", left",0.25\r\n'));
		expect(read).toEqual({
			ok: true,
			columns: ['tag', 'description', 'scale'],
			rows: [{ tag: 'A.1', description: 'hall "B", left', scale: 0.25 }],
		});
	});

	it.each([
		['semicolons with decimal commas', 'tag;scale;offset\nA;0,5;-1,25\n', 0.5, -1.25],
		['tabs with decimal commas', 'tag\tscale\toffset\nA\t0,5\t-1,25\n', 0.5, -1.25],
		['a declared separator', 'sep=;\ntag;scale;offset\nA;1e-3;2\n', 0.001, 2],
		['the minus sign of a spreadsheet (U+2212)', 'tag,scale,offset\nA,0.5,\u22122\n', 0.5, -2],
	])('takes %s', (_, text, scale, offset) => {
		expect(csvToRows(text)).toMatchObject({ ok: true, rows: [{ tag: 'A', scale, offset }] });
	});

	it('tells an empty cell (cleared) from a missing column (not touched)', () => {
		const read = csvToRows('tag,deadband\nA,\n');
		expect(read).toEqual({ ok: true, columns: ['tag', 'deadband'], rows: [{ tag: 'A', deadband: null }] });
	});

	it('names every bad cell by row and column, and takes nothing', () => {
		const read = csvToRows('tag,scale,enabled,sentinels\nA,1.234,maybe,0x8000\nB,0x10,true,12 x\n,1,true,\n');
		expect(read).toEqual({
			ok: false,
			faults: [
				{ row: 1, column: 'enabled', detail: '"maybe" found; expected true or false' },
				{ row: 2, column: 'scale', detail: '"0x10" is not a number; expected a form like 0.25' },
				{ row: 2, column: 'sentinels', detail: '"x" found; expected numbers or bit patterns like 0x8000, separated by spaces' },
				{ row: 3, column: 'tag', detail: 'empty; every row needs its tag' },
			],
		});
	});

	it.each([
		['an unknown column', 'tag,colour\nA,red\n', 'colour'],
		['a column twice', 'tag,scale,scale\nA,1,2\n', 'scale'],
		['no tag column', 'scale\n1\n', 'tag'],
	])('refuses %s', (_, text, column) => {
		expect(csvToRows(text)).toMatchObject({ ok: false, faults: [{ row: 0, column }] });
	});

	it('refuses a row with too few or too many cells instead of shifting it', () => {
		expect(csvToRows('tag,scale,unit\nA,1\nB,1,mm/s,extra\n')).toMatchObject({ ok: false, faults: [{ row: 1 }, { row: 2 }] });
	});

	it('refuses a stray quote instead of swallowing rows', () => {
		expect(csvToRows('tag,description\nA,"open\nB,fine\n')).toMatchObject({ ok: false });
	});

	it('says what to do with UTF-16 and with bytes that are not UTF-8', () => {
		expect(csvToRows(bytes([0xff, 0xfe], 't'))).toMatchObject({
			ok: false,
			faults: [{ detail: expect.stringContaining('UTF-16') }],
		});
		expect(csvToRows(bytes('tag,description\nA,', [0xe9], '\n'))).toMatchObject({
			ok: false,
			faults: [{ detail: expect.stringContaining('not UTF-8') }],
		});
	});

	it('reads grouping in neither style as a number', () => {
		expect(csvToRows('tag;scale\nA;1.234,5\n').ok).toBe(false);
		expect(csvToRows('tag,scale\nA,"1,234.5"\n').ok).toBe(false);
	});
});

describe('writing a map as CSV', () => {
	it('neutralises text that a spreadsheet would run, and leaves numbers alone', () => {
		expect(['=cmd', '+49 30', '@x', '-5.00', '-a', 'plain'].map(neutralise)).toEqual([
			"'=cmd",
			"'+49 30",
			"'@x",
			'-5.00',
			"'-a",
			'plain',
		]);
	});

	it('comes back unchanged', () => {
		fc.assert(
			fc.property(
				fc.array(
					fc.record({
						tag: fc.stringMatching(/^[A-Za-z0-9][A-Za-z0-9._-]{0,20}$/),
						plant_tag: fc.option(fc.string({ maxLength: 30 }), { nil: null }),
						scale: fc.option(fc.double({ noNaN: true, noDefaultInfinity: true }), { nil: null }),
						sentinels: fc.option(fc.array(fc.oneof(fc.integer(), fc.constant('0x8000')), { minLength: 1, maxLength: 3 }), {
							nil: null,
						}),
						enabled: fc.option(fc.boolean(), { nil: null }),
					}),
					{ minLength: 1, maxLength: 5 },
				),
				(rows) => {
					const tidy = (rows as MapRow[]).map((row) => tidyRow({ ...row, scale: Object.is(row.scale, -0) ? 0 : row.scale }));
					const read = csvToRows(mapToCsv(tidy));
					expect(read.ok && read.rows.map((row) => tidyRow(row as MapRow))).toEqual(tidy);
				},
			),
			{ numRuns: 300 },
		);
	});

	it('restores what it neutralised, whatever the text', () => {
		fc.assert(fc.property(fc.string(), (text) => restoreText(neutralise(text)) === text));
	});
});
