// Pure.

/** One member that differs, by its path. */
export interface Difference {
	path: string;
	before: string | null;
	after: string | null;
}

function flatten(value: unknown, path: string, into: Map<string, string>): void {
	if (value === null || value === undefined) return;
	if (Array.isArray(value)) {
		if (value.every((item) => item === null || typeof item !== 'object')) into.set(path, value.join(', '));
		else value.forEach((item, index) => flatten(item, `${path} ${index + 1}`, into));
	} else if (typeof value === 'object') {
		for (const [name, inner] of Object.entries(value))
			flatten(inner, path ? `${path} · ${name.replaceAll('_', ' ')}` : name.replaceAll('_', ' '), into);
	} else into.set(path, String(value));
}

/** What stands between two JSON values, member by member, so that a person can read it. Equal members are left out. */
export function differences(before: unknown, after: unknown): Difference[] {
	const old = new Map<string, string>();
	const now = new Map<string, string>();
	flatten(before, '', old);
	flatten(after, '', now);
	const found: Difference[] = [];
	for (const path of new Set([...old.keys(), ...now.keys()])) {
		const was = old.get(path) ?? null;
		const is = now.get(path) ?? null;
		if (was !== is) found.push({ path: path || 'value', before: was, after: is });
	}
	return found;
}

/** `source.changed` in words: `source changed`. */
export function actionWords(action: string): string {
	return action.replace('.', ' ').replaceAll('-', ' ');
}
