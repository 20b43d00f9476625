import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import type { Reading } from '#lib/domain/reading.ts';
import type { PlannedLimit } from '#lib/domain/tag-map/tag-plan.ts';
import { freshState, judge } from './evaluate.ts';
import { createReplay } from './replay.ts';

const reading = (at: number, value: number | null, quality = 0): Reading =>
	({
		tagId: 1,
		at,
		value,
		quality,
		timeFrom: 'source',
		receivedAt: at,
		sourceAt: null,
		reason: null,
		raw: value,
		wire: null,
		revision: 1,
	}) as Reading;
const high = (extra: Partial<PlannedLimit> = {}): PlannedLimit =>
	({
		tag: 'T',
		limitId: 1,
		kind: 'high',
		level: 'alert',
		value: 5,
		deadband: 1,
		raise_after_s: 10,
		clear_after_s: 0,
		...extra,
	}) as PlannedLimit;

/** Readings a second apart. */
const play = (limit: PlannedLimit, values: readonly (number | null)[], end: number) => {
	const replay = createReplay([limit]);
	values.forEach((value, second) => replay.take(reading(second * 1_000, value, value === null ? 0x80310000 : 0)));
	return replay.finish(end * 1_000)[0];
};

describe('a back-test', () => {
	it('counts an excursion once it has held for its delay, and its seconds until it cleared', () => {
		// Above from 0 s, raised at 10 s, below 5 - 1 at 20 s.
		expect(play(high(), [...Array<number>(20).fill(6), 3], 30)).toEqual({
			raises: 1,
			alarmS: 10,
			longestS: 10,
			firstAt: 10_000,
			lastAt: 10_000,
			isOpen: false,
		});
	});

	it('counts nothing for a spike that the delay covers, and nothing within the deadband', () => {
		expect(play(high(), [1, 9, 1, ...Array<number>(20).fill(4.5)], 30)).toMatchObject({ raises: 0, alarmS: 0 });
	});

	it('leaves an excursion open that had not ended', () => {
		expect(play(high({ raise_after_s: 0 }), [1, 6, 6], 60)).toMatchObject({ raises: 1, alarmS: 59, isOpen: true });
	});

	it('begins a delay anew after the tag had gone stale', () => {
		expect(play(high(), [...Array<number>(6).fill(6), null, ...Array<number>(6).fill(6)], 20)).toMatchObject({ raises: 0 });
		expect(play(high(), [...Array<number>(6).fill(6), null, ...Array<number>(11).fill(6)], 20)).toMatchObject({
			raises: 1,
			firstAt: 17_000,
		});
	});

	it('judges each limit as live judging would have: same moments raised and cleared, whatever the values', () => {
		fc.assert(
			fc.property(
				fc.array(fc.double({ min: 0, max: 10, noNaN: true }), { maxLength: 120 }),
				fc.integer({ min: 0, max: 5 }),
				(values, delay) => {
					const limit = high({ raise_after_s: delay, clear_after_s: delay });
					let state = freshState();
					let raises = 0;
					values.forEach((value, second) => {
						const judged = judge(reading(second * 1_000, value), { limits: [limit], staleAfterS: 30 }, state, {
							now: second * 1_000,
						});
						state = judged.state;
						raises += judged.changes.filter((change) => change.kind === 'raised').length;
					});
					expect(play(limit, values, values.length)?.raises).toBe(raises);
				},
			),
		);
	});
});
