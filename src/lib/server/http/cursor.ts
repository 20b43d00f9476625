// Pure.
const PART = /^[A-Za-z0-9_-]+$/;

/** An opaque cursor in `[A-Za-z0-9._-]` over the values that a page ended at. */
export function encodeCursor(values: readonly (string | number)[]): string {
	return Buffer.from(JSON.stringify(values)).toString('base64url');
}

/** The values inside a cursor; null when it is none of ours. */
export function decodeCursor(cursor: string): (string | number)[] | null {
	if (!PART.test(cursor)) return null;
	try {
		const values: unknown = JSON.parse(Buffer.from(cursor, 'base64url').toString('utf8'));
		const isOurs =
			Array.isArray(values) &&
			values.every((value) => typeof value === 'string' || (typeof value === 'number' && Number.isFinite(value)));
		return isOurs ? (values as (string | number)[]) : null;
	} catch {
		return null;
	}
}

/** The one whole number inside a cursor; null when it is none of ours. */
export function decodeIdCursor(cursor: string): number | null {
	const values = decodeCursor(cursor);
	const id = values?.length === 1 ? values[0] : null;
	return typeof id === 'number' && Number.isSafeInteger(id) ? id : null;
}
