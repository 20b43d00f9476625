// Pure.
/** What a function answers when a refusal is expected: a value, or a reason that the caller's `switch` can exhaust. */
export type Outcome<T, Reason extends string = string> = { ok: true; value: T } | { ok: false; reason: Reason; detail?: string };

/** Wraps a value as a success. */
export function ok<T>(value: T): { ok: true; value: T } {
	return { ok: true, value };
}

/** Refuses with a machine-readable reason and, where it helps, what was found. */
export function refuse<Reason extends string>(reason: Reason, detail?: string): { ok: false; reason: Reason; detail?: string } {
	return detail === undefined ? { ok: false, reason } : { ok: false, reason, detail };
}
