// Pure.
import Papa from 'papaparse';
import { MAP_FIELDS, mapRowSchema, type MapField, type MapRow } from './row.ts';

/** A bad cell: `row` counts the data rows from 1 (0 is the header), `column` is its name. */
export interface CellFault {
	row: number;
	column: string;
	detail: string;
}

/** A row as imported: only the columns of the file; an empty cell is null, a missing column is not touched. */
export type ImportedRow = Partial<MapRow> & { tag: string };
export type CsvImport = { ok: true; rows: ImportedRow[]; columns: MapField[] } | { ok: false; faults: CellFault[] };

const NUMBER_FIELDS = new Set<MapField>([
	'id',
	'scale',
	'offset',
	'frequency_hz',
	'band_low_hz',
	'band_high_hz',
	'low_range',
	'high_range',
	'deadband',
	'interval_ms',
	'expected_every_s',
	'stale_after_s',
	'frozen_after_s',
	'unit_id',
	'register',
	'bit',
]);
/** JSON's number grammar, a leading + aside: no hexadecimal, no blanks, no grouping. */
const NUMBER = /^[+-]?(0|[1-9]\d*)(\.\d+)?([eE][+-]?\d+)?$/;
/** Cells that a spreadsheet would run as a formula. */
const FORMULA_START = /^[=+\-@\t\r]/;
const MOST_FAULTS = 500;

/** The rows as RFC 4180 text: CRLF, a header row, quotes only where needed, formula-like text neutralised by a leading apostrophe. */
export function mapToCsv(rows: readonly MapRow[], columns: readonly MapField[] = MAP_FIELDS): string {
	const lines = [columns.join(',')];
	for (const row of rows) lines.push(columns.map((column) => csvCell(cellOf(row, column))).join(','));
	return `${lines.join('\r\n')}\r\n`;
}

function cellOf(row: MapRow, column: MapField): string {
	const value = row[column];
	if (value == null) return '';
	if (Array.isArray(value)) return value.join(' ');
	if (typeof value === 'string') return neutralise(value);
	return String(value);
}

/** Text that a spreadsheet would take for a formula gets an apostrophe; numbers, negative ones too, stay numbers. */
export function neutralise(text: string): string {
	// An apostrophe that was there already is doubled, so that it comes back unchanged.
	if (/^'+[=+\-@\t\r]/.test(text)) return `'${text}`;
	return FORMULA_START.test(text) && !NUMBER.test(text) ? `'${text}` : text;
}

/** Undoes `neutralise`. */
export function restoreText(cell: string): string {
	return /^'+[=+\-@\t\r]/.test(cell) ? cell.slice(1) : cell;
}

/** One cell by RFC 4180: quoted where it holds a comma, quote or line break. */
export function csvCell(text: string): string {
	return /[",\r\n]/.test(text) ? `"${text.replaceAll('"', '""')}"` : text;
}

/**
 * Reads a map from CSV: UTF-8 with or without BOM; comma, semicolon or tab; CRLF or LF; decimal comma when the separator is not a comma.
 * All or nothing: every bad cell is named by row and column.
 */
export function csvToRows(input: Uint8Array | string): CsvImport {
	const decoded = decode(input);
	if (!decoded.ok) return decoded;
	let text = decoded.text;
	const declared = /^sep=(.)\r?\n/.exec(text);
	if (declared) text = text.slice(declared[0].length);
	const separator = declared?.[1] ?? separatorOf(text);
	if (![',', ';', '\t'].includes(separator))
		return fail(0, 'sep', `separator "${separator}" found; expected comma, semicolon or tab`);

	const parsed = Papa.parse<string[]>(text, { delimiter: separator, skipEmptyLines: 'greedy' });
	const broken = parsed.errors.find((error) => error.type === 'Quotes');
	if (broken) return fail(broken.row ?? 0, '', 'a quote is opened and not closed, or stands inside a cell without being doubled');
	const [header, ...body] = parsed.data;
	if (!header) return fail(0, '', 'the file is empty; expected a header row with the columns of the map');

	const columns = header.map((name) => name.trim());
	const faults: CellFault[] = [];
	const seen = new Set<string>();
	for (const name of columns) {
		if (!(MAP_FIELDS as string[]).includes(name))
			faults.push({
				row: 0,
				column: name,
				detail: name === '' ? 'a column without a name' : 'no column of the map has this name',
			});
		else if (seen.has(name)) faults.push({ row: 0, column: name, detail: 'this column stands twice' });
		seen.add(name);
	}
	if (!seen.has('tag')) faults.push({ row: 0, column: 'tag', detail: 'the column "tag" is missing' });
	if (faults.length > 0) return { ok: false, faults };

	const decimalComma = separator !== ',';
	const rows: ImportedRow[] = [];
	body.forEach((cells, i) => {
		const number = i + 1;
		if (faults.length >= MOST_FAULTS) return;
		if (cells.length !== columns.length) {
			faults.push({ row: number, column: '', detail: `${cells.length} cells found; the header has ${columns.length}` });
			return;
		}
		const row: Record<string, unknown> = {};
		columns.forEach((column, j) => {
			const value = cellValue(column as MapField, cells[j] ?? '', decimalComma);
			if (value.ok) row[column] = value.value;
			else faults.push({ row: number, column, detail: value.detail });
		});
		const tag = row.tag;
		if (typeof tag !== 'string' || tag === '') {
			if (!faults.some((fault) => fault.row === number && fault.column === 'tag'))
				faults.push({ row: number, column: 'tag', detail: 'empty; every row needs its tag' });
			return;
		}
		const shape = mapRowSchema.partial().safeParse(row);
		if (!shape.success) {
			for (const issue of shape.error.issues)
				faults.push({ row: number, column: String(issue.path[0] ?? ''), detail: issue.message });
			return;
		}
		rows.push({ ...row, tag } as ImportedRow);
	});
	return faults.length > 0 ? { ok: false, faults } : { ok: true, rows, columns: columns as MapField[] };
}

function fail(row: number, column: string, detail: string): { ok: false; faults: CellFault[] } {
	return { ok: false, faults: [{ row, column, detail }] };
}

function decode(input: Uint8Array | string): { ok: true; text: string } | { ok: false; faults: CellFault[] } {
	if (typeof input === 'string') return { ok: true, text: input.replace(/^\uFEFF/, '') };
	if ((input[0] === 0xff && input[1] === 0xfe) || (input[0] === 0xfe && input[1] === 0xff)) {
		return fail(0, '', 'the file is UTF-16 ("Unicode text"); save it as CSV UTF-8');
	}
	try {
		return { ok: true, text: new TextDecoder('utf-8', { fatal: true }).decode(input).replace(/^\uFEFF/, '') };
	} catch {
		return fail(0, '', 'the file is not UTF-8; save it as CSV UTF-8');
	}
}

/** The separator that stands most often in the header row, outside quotes. */
function separatorOf(text: string): string {
	const counts = { ',': 0, ';': 0, '\t': 0 };
	let quoted = false;
	for (const char of text) {
		if (char === '"') quoted = !quoted;
		else if (!quoted && (char === '\n' || char === '\r')) break;
		else if (!quoted && char in counts) counts[char as keyof typeof counts] += 1;
	}
	const best = (Object.entries(counts) as [string, number][]).sort((a, b) => b[1] - a[1])[0];
	return best && best[1] > 0 ? best[0] : ',';
}

type CellValue = { ok: true; value: unknown } | { ok: false; detail: string };

function cellValue(column: MapField, cell: string, decimalComma: boolean): CellValue {
	const text = cell.trim();
	if (text === '') return { ok: true, value: null };
	if (column === 'enabled') {
		const word = text.toLowerCase();
		if (['true', 'yes', '1'].includes(word)) return { ok: true, value: true };
		if (['false', 'no', '0'].includes(word)) return { ok: true, value: false };
		return { ok: false, detail: `"${text}" found; expected true or false` };
	}
	if (NUMBER_FIELDS.has(column)) return numberOf(text, decimalComma);
	if (column === 'sentinels') {
		const parts: (number | string)[] = [];
		for (const part of restoreText(text).split(/\s+/)) {
			if (/^0x[0-9a-fA-F]+$/.test(part)) parts.push(part);
			else {
				const value = numberOf(part, decimalComma);
				if (!value.ok)
					return { ok: false, detail: `"${part}" found; expected numbers or bit patterns like 0x8000, separated by spaces` };
				parts.push(value.value as number);
			}
		}
		return { ok: true, value: parts };
	}
	return { ok: true, value: restoreText(column === 'states' ? cell : text) };
}

function numberOf(text: string, decimalComma: boolean): CellValue {
	// U+2212 is what some spreadsheets write for minus.
	let plain = text.replace('\u2212', '-');
	if (decimalComma) {
		if (plain.includes(',') && plain.includes('.'))
			return { ok: false, detail: `"${text}" has both comma and point; write numbers without grouping` };
		plain = plain.replace(',', '.');
	}
	if (!NUMBER.test(plain) || !Number.isFinite(Number(plain))) {
		return { ok: false, detail: `"${text}" is not a number; expected a form like ${decimalComma ? '0,25' : '0.25'}` };
	}
	return { ok: true, value: Number(plain) };
}
