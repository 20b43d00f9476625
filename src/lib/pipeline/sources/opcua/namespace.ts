// Pure.
/** A stored node id resolved in a session: the namespace's index may move between sessions, its URI does not. */
export type Resolved = { ok: true; nodeId: string } | { ok: false; reason: 'namespace-missing' | 'node-id-form'; detail: string };

/** Turns `nsu=URI;s=…` into `ns=i;s=…` by the session's namespace array; `i=…` and `ns=…` pass through. */
export function resolveNodeId(text: string, namespaces: readonly string[]): Resolved {
	const match = /^nsu=([^;]+);(.+)$/s.exec(text);
	if (!match)
		return /^(ns=\d+;)?[isgb]=/.test(text)
			? { ok: true, nodeId: text }
			: { ok: false, reason: 'node-id-form', detail: `"${text}" is not a node id` };
	const uri = (match[1] ?? '').replaceAll('%3B', ';');
	const index = namespaces.indexOf(uri);
	return index < 0
		? { ok: false, reason: 'namespace-missing', detail: `the server has no namespace ${uri}` }
		: { ok: true, nodeId: `ns=${index};${match[2]}` };
}

/** Turns a session's `ns=i;s=…` into `nsu=URI;s=…`, as it is stored; namespace 0 stands without. */
export function toStoredNodeId(text: string, namespaces: readonly string[]): string {
	const match = /^ns=(\d+);(.+)$/s.exec(text);
	if (!match) return text;
	const index = Number(match[1]);
	const uri = namespaces[index];
	return index === 0 || uri === undefined
		? index === 0
			? (match[2] ?? text)
			: text
		: `nsu=${uri.replaceAll(';', '%3B')};${match[2]}`;
}
