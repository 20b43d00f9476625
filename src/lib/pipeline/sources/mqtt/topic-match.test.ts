// Pure.
import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { filterCovers, filtersOverlap, subscriptionCover } from './filters.ts';
import { topicMatches } from './topic-match.ts';

const name = fc.constantFrom('a', 'b', '', '$s');
const topic = fc.array(name, { minLength: 1, maxLength: 4 }).map((levels) => levels.join('/'));
const filter = fc
	.tuple(fc.array(fc.oneof(name, fc.constant('+')), { minLength: 1, maxLength: 4 }), fc.boolean())
	.map(([levels, rest]) => [...levels, ...(rest ? ['#'] : [])].join('/'));

describe('topic filters', () => {
	// Source: the examples of MQTT 3.1.1 §4.7.1.2, §4.7.1.3 and §4.7.2, from memory.
	it.each([
		['sport/tennis/player1/#', 'sport/tennis/player1', true],
		['sport/tennis/player1/#', 'sport/tennis/player1/ranking', true],
		['sport/tennis/player1/#', 'sport/tennis/player1/score/wimbledon', true],
		['sport/#', 'sport', true],
		['sport/tennis/+', 'sport/tennis/player1', true],
		['sport/tennis/+', 'sport/tennis/player1/ranking', false],
		['sport/+', 'sport', false],
		['sport/+', 'sport/', true],
		['+/+', '/finance', true],
		['/+', '/finance', true],
		['+', '/finance', false],
		['#', '$SYS/uptime', false],
		['+/monitor/Clients', '$SYS/monitor/Clients', false],
		['$SYS/#', '$SYS/uptime', true],
		['ACCOUNTS', 'Accounts', false],
	])('%s and %s: %s', (wanted, given, matches) => {
		expect(topicMatches(wanted, given)).toBe(matches);
	});

	it('lets a filter that covers another match all that the other matches', () => {
		fc.assert(
			fc.property(filter, filter, topic, (wide, narrow, given) => {
				fc.pre(filterCovers(wide, narrow) && topicMatches(narrow, given));
				expect(topicMatches(wide, given)).toBe(true);
			}),
		);
	});

	it('says of two filters that match one topic that they overlap', () => {
		fc.assert(
			fc.property(filter, filter, topic, (one, other, given) => {
				fc.pre(topicMatches(one, given) && topicMatches(other, given));
				expect(filtersOverlap(one, other)).toBe(true);
			}),
		);
	});

	it('subscribes so that every wanted topic comes exactly once', () => {
		fc.assert(
			fc.property(fc.array(filter, { maxLength: 6 }), topic, (wanted, given) => {
				const cover = subscriptionCover(wanted);
				const times = cover.filter((one) => topicMatches(one, given)).length;
				expect(times).toBeLessThanOrEqual(1);
				if (wanted.some((one) => topicMatches(one, given))) expect(times).toBe(1);
			}),
			{ numRuns: 1_000 },
		);
	});

	it('keeps the widest of nested filters', () => {
		expect(subscriptionCover(['a/+', 'a/b', 'a/#', 'c/d'])).toEqual(['a/#', 'c/d']);
	});
});
