// Pure.
export const JSON_TYPE = 'application/json';
export const CSV_TYPE = 'text/csv';
export const NDJSON_TYPE = 'application/x-ndjson';
export type AnswerType = typeof JSON_TYPE | typeof CSV_TYPE | typeof NDJSON_TYPE | 'text/event-stream';

/** The offered type that the Accept header ranks highest [RFC 9110 §12.5.1]; the first offered where it says nothing that fits. */
export function chooseType<T extends string>(accept: string | null, offered: readonly [T, ...T[]]): T {
	let best: { type: T; q: number } | null = null;
	const ranges = (accept ?? '*/*').split(',').map((part) => {
		const [range = '', ...parameters] = part
			.trim()
			.toLowerCase()
			.split(';')
			.map((text) => text.trim());
		const weight = parameters.find((parameter) => parameter.startsWith('q='));
		return { range, q: weight ? Number(weight.slice(2)) || 0 : 1 };
	});
	for (const type of offered) {
		const [family] = type.split('/');
		// The most specific range that matches decides about a type.
		const range =
			ranges.find((one) => one.range === type) ??
			ranges.find((one) => one.range === `${family}/*`) ??
			ranges.find((one) => one.range === '*/*');
		if (range && range.q > 0 && range.q > (best?.q ?? 0)) best = { type, q: range.q };
	}
	return best?.type ?? offered[0];
}
