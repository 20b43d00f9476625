import { describe, expect, test } from 'vitest';
import { formatSpan, formatTime, utcText, zoneName } from './format-time.ts';

// In British Summer Time London is one hour ahead of UTC; Kathmandu is at +05:45 (IANA time zone database).
const summer = Date.UTC(2026, 6, 1, 13, 22, 5, 82);

describe('a time is shown in the zone of the site', () => {
	test('with the day left out when it is today there', () => {
		expect(formatTime(summer, 'Europe/London', 'exact', summer)).toBe('14:22:05.082');
		expect(formatTime(summer, 'Asia/Kathmandu', 'minute', summer)).toBe('19:07');
	});
	test('with the day in front when it is not', () => {
		expect(formatTime(summer, 'Europe/London', 'minute', summer + 86_400_000)).toBe('1 Jul 14:22');
		expect(formatTime(summer, 'Europe/London', 'minute', summer + 366 * 86_400_000)).toBe('1 Jul 2026 14:22');
	});
	test('and in UTC in its title', () => {
		expect(utcText(summer)).toBe('2026-07-01 13:22:05.082 UTC');
		expect(zoneName(summer, 'Europe/London')).toBe('BST');
	});
});

test('a span is one figure with the word that fits', () => {
	expect([380, 14_000, 13 * 60_000, 4 * 3_600_000, 3 * 86_400_000].map(formatSpan)).toEqual([
		'380 ms',
		'14 s',
		'13 min',
		'4 h',
		'3 d',
	]);
});
