// Pure.
import { ok, refuse, type Outcome } from '../outcome.ts';

/** Words for a state's values from `0=closed;1=open`. Refuses 'states-form' with the part that does not fit. */
export function parseStates(text: string): Outcome<ReadonlyMap<number, string>, 'states-form'> {
	const states = new Map<number, string>();
	for (const part of text.split(';')) {
		if (part.trim() === '') continue;
		const match = /^\s*(-?\d+)\s*=\s*(.+?)\s*$/.exec(part);
		if (!match) return refuse('states-form', `"${part.trim()}" found`);
		const value = Number(match[1]);
		if (states.has(value)) return refuse('states-form', `${value} stands twice`);
		states.set(value, match[2] ?? '');
	}
	return states.size > 0 ? ok(states) : refuse('states-form', 'no state found');
}
