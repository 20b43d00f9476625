// Edge: http. May touch: Request, Response, URL. Not: database.
import { CSV_TYPE, NDJSON_TYPE, type AnswerType } from './negotiate.ts';

export type Cell = string | number | boolean | null | undefined;

/** One column of the CSV form: its name and how a row fills it. */
export type Columns<Row> = readonly (readonly [name: string, of: (row: Row) => Cell])[];

/** Text that a spreadsheet would take for a formula gets an apostrophe in front; numbers stay as they are. */
function csvCell(value: Cell): string {
	if (value === null || value === undefined) return '';
	if (typeof value !== 'string') return String(value);
	const text = /^[=+\-@\t\r]/.test(value) && !/^[+-]?\d+(\.\d+)?$/.test(value) ? `'${value}` : value;
	return /[",\r\n]/.test(text) ? `"${text.replaceAll('"', '""')}"` : text;
}

/** One record with its line end [RFC 4180 §2]. */
export function csvLine(cells: readonly Cell[]): string {
	return `${cells.map(csvCell).join(',')}\r\n`;
}

/** Pages as CSV with a header row, or as one JSON object a line; a page is asked for only when the reader has taken the last. */
export function rowStream<Row>(type: AnswerType, pages: AsyncIterable<readonly Row[]>, columns: Columns<Row>): Response {
	const encoder = new TextEncoder();
	const iterator = pages[Symbol.asyncIterator]();
	const isCsv = type === CSV_TYPE;
	const lineOf = isCsv ? (row: Row) => csvLine(columns.map(([, of]) => of(row))) : (row: Row) => `${JSON.stringify(row)}\n`;
	let isFirst = true;
	const body = new ReadableStream<Uint8Array>(
		{
			async pull(controller) {
				let text = isFirst && isCsv ? csvLine(columns.map(([name]) => name)) : '';
				isFirst = false;
				let next = await iterator.next();
				// A page without rows must not look like an answer to this pull: the stream would wait for ever.
				while (!next.done && next.value.length === 0) next = await iterator.next();
				if (!next.done) text += next.value.map(lineOf).join('');
				if (text !== '') controller.enqueue(encoder.encode(text));
				if (next.done) controller.close();
			},
			async cancel() {
				await iterator.return?.();
			},
		},
		{ highWaterMark: 0 },
	);
	return new Response(body, { headers: { 'content-type': isCsv ? `${CSV_TYPE}; charset=utf-8; header=present` : NDJSON_TYPE } });
}

/** Pages one after another, from the first; `read` gets the cursor of the page before. */
export async function* pagesOf<Row>(
	read: (after: string | undefined) => Promise<{ items: readonly Row[]; next: string | null }>,
	after?: string,
): AsyncGenerator<readonly Row[]> {
	let cursor: string | undefined = after;
	for (;;) {
		const page = await read(cursor);
		yield page.items;
		if (page.next === null) return;
		cursor = page.next;
	}
}
