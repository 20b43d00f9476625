// Pure.
import type { MqttAddress, WantedAddress } from '#lib/domain/tag-map/address.ts';
import { hasWildcard } from '#lib/domain/tag-map/topic-filter.ts';
import { topicMatches } from './topic-match.ts';

/** Topics whose tags are remembered, so that a flood of ever new topics does not fill the memory. */
const MOST_TOPICS = 50_000;

export interface Route {
	key: number;
	/** The payload says when it was measured. */
	hasTime: boolean;
}
export type RouteTopic = (topic: string) => readonly Route[];

/** Finds the tags that a topic feeds; exact topics by look-up, filters by matching once a topic. */
export function routeBy(wanted: readonly (WantedAddress & { address: MqttAddress })[]): RouteTopic {
	const exact = new Map<string, Route[]>();
	const wild: { filter: string; route: Route }[] = [];
	for (const { key, address } of wanted) {
		const route = { key, hasTime: address.timePointer !== null && address.timePointer !== '' };
		if (hasWildcard(address.topic)) wild.push({ filter: address.topic, route });
		else exact.set(address.topic, [...(exact.get(address.topic) ?? []), route]);
	}
	if (wild.length === 0) return (topic) => exact.get(topic) ?? [];
	const seen = new Map<string, readonly Route[]>();
	return (topic) => {
		const known = seen.get(topic);
		if (known) return known;
		const routes = [
			...(exact.get(topic) ?? []),
			...wild.filter(({ filter }) => topicMatches(filter, topic)).map(({ route }) => route),
		];
		if (seen.size >= MOST_TOPICS) seen.clear();
		seen.set(topic, routes);
		return routes;
	};
}
