// Pure.
import type { z } from 'zod';

/** One thing wrong with the input: a place in the body [RFC 6901] or a query parameter. */
export type InputError = { pointer: string; detail: string } | { parameter: string; detail: string };

/** One member of a path as JSON Pointer writes it [RFC 6901 §3]. */
function escapeMember(member: PropertyKey): string {
	return String(member).replaceAll('~', '~0').replaceAll('/', '~1');
}

type Issue = z.core.$ZodIssue;

/** Every place of the body that is wrong, by JSON Pointer. A union reports the variant that came furthest. */
export function pointerErrors(issues: readonly Issue[], base: readonly PropertyKey[] = []): InputError[] {
	return issues.flatMap((issue): InputError[] => {
		const path = [...base, ...issue.path];
		if (issue.code === 'unrecognized_keys') {
			return issue.keys.map((key) => ({
				pointer: `/${[...path, key].map(escapeMember).join('/')}`,
				detail: 'no member of that name is known here',
			}));
		}
		if (issue.code === 'invalid_union' && issue.errors.length > 0) {
			const best = [...issue.errors].sort((a, b) => depth(b) - depth(a) || a.length - b.length)[0] ?? [];
			if (depth(best) > 0) return pointerErrors(best, path);
		}
		return [{ pointer: path.length === 0 ? '' : `/${path.map(escapeMember).join('/')}`, detail: issue.message }];
	});
}

function depth(issues: readonly Issue[]): number {
	return Math.max(0, ...issues.map((issue) => issue.path.length));
}

/** Every query parameter that is wrong. */
export function parameterErrors(issues: readonly Issue[]): InputError[] {
	return issues.flatMap((issue): InputError[] => {
		if (issue.code === 'unrecognized_keys')
			return issue.keys.map((key) => ({ parameter: key, detail: 'no parameter of that name is known here' }));
		return [{ parameter: String(issue.path[0] ?? ''), detail: issue.message }];
	});
}
