// Pure.

/** True for what the database refuses by its rules (data, constraints, names, raised by us); false where it is away or busy, and trying again helps. */
export function isRefusal(error: unknown): boolean {
	const code = error instanceof Error && 'code' in error ? String(error.code) : '';
	return /^(22|23|42|P0)/.test(code);
}
