// Pure.
import { hasWildcard } from '#lib/domain/tag-map/topic-filter.ts';
import { topicMatches } from './topic-match.ts';

/** Whether some topic is matched by both filters. */
export function filtersOverlap(one: string, other: string): boolean {
	const [left, right] = [one.split('/'), other.split('/')];
	if (hiddenFrom(left, right) || hiddenFrom(right, left)) return false;
	for (let index = 0; index < Math.max(left.length, right.length); index++) {
		const [a, b] = [left[index], right[index]];
		if (a === '#' || b === '#') return true;
		if (a === undefined || b === undefined) return false;
		if (a !== b && a !== '+' && b !== '+') return false;
	}
	return true;
}

/** Whether every topic that `narrow` matches is matched by `wide` too. */
export function filterCovers(wide: string, narrow: string): boolean {
	const [left, right] = [wide.split('/'), narrow.split('/')];
	if (hiddenFrom(left, right)) return false;
	for (let index = 0; index < Math.max(left.length, right.length); index++) {
		const [a, b] = [left[index], right[index]];
		if (a === '#') return true;
		if (a === undefined || b === undefined || b === '#') return false;
		if (a !== b && a !== '+') return false;
	}
	return true;
}

/**
 * The filters to subscribe to so that every wanted topic comes once, whatever the broker does with overlapping
 * subscriptions: a server may send one copy for each that matches [MQTT-3.3.5-1]. Filters that cross without one
 * holding the other are widened to one that holds both; what comes beside is told apart on arrival.
 */
export function subscriptionCover(wanted: Iterable<string>): string[] {
	const all = new Set(wanted);
	let wild: string[] = [];
	for (const filter of all) if (hasWildcard(filter)) wild = added(wild, filter);
	const exact = [...all].filter((filter) => !hasWildcard(filter) && !wild.some((one) => topicMatches(one, filter)));
	return [...wild, ...exact].sort();
}

/** The set with the filter in it, no two overlapping. */
function added(filters: readonly string[], filter: string): string[] {
	const crossed = filters.find((one) => filtersOverlap(one, filter));
	if (crossed === undefined) return [...filters, filter];
	const rest = filters.filter((one) => one !== crossed);
	return added(rest, filterCovers(crossed, filter) ? crossed : joined(crossed, filter));
}

/** The narrowest filter that holds both. */
function joined(one: string, other: string): string {
	const [left, right] = [one.split('/'), other.split('/')];
	const levels: string[] = [];
	for (let index = 0; index < Math.max(left.length, right.length); index++) {
		const [a, b] = [left[index], right[index]];
		if (a === '#' || b === '#' || a === undefined || b === undefined) return [...levels, '#'].join('/');
		levels.push(a === b ? a : '+');
	}
	return levels.join('/');
}

/** A first level that is a wildcard sees no topic that begins with `$` [MQTT-4.7.2-1]. */
function hiddenFrom(wild: readonly string[], named: readonly string[]): boolean {
	return (wild[0] === '#' || wild[0] === '+') && (named[0] ?? '').startsWith('$');
}
