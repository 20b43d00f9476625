import { describe, expect, it } from 'vitest';
import { STATUS_CODES } from '#lib/domain/quality.ts';
import type { Reading } from '#lib/domain/reading.ts';
import type { PlannedLimit } from '#lib/domain/tag-map/tag-plan.ts';
import { alarmStateOf } from './alarm-lifecycle.ts';
import { confirm, freshState, goStale, judge, type AlarmChange, type JudgingState } from './evaluate.ts';
import { freshStretch, judgeLate } from './judge-late.ts';
import { ratePerMinute } from './rate.ts';

const T0 = Date.UTC(2026, 11, 1, 12, 0, 0);
const limit = (extra: Partial<PlannedLimit> = {}): PlannedLimit => ({
	tag: 'T',
	kind: 'high',
	level: 'alert',
	value: 4.5,
	limitId: 1,
	...extra,
});
const reading = (second: number, value: number | null, quality: number = STATUS_CODES.Good): Reading => ({
	tagId: 1,
	at: T0 + second * 1_000,
	value,
	quality,
	timeFrom: 'source',
	receivedAt: T0 + second * 1_000,
	sourceAt: null,
	reason: null,
	raw: value,
	wire: null,
	revision: 1,
});

/** Judges a series; answers the changes as `kind@second level`. */
function run(limits: PlannedLimit[], series: [number, number | null, number?][], staleAfterS = 30) {
	let state: JudgingState | null = null;
	const said: string[] = [];
	const all: AlarmChange[] = [];
	for (const [second, value, quality] of series) {
		// A restart at every step: the state survives as JSON.
		const kept: JudgingState | null = state === null ? null : (JSON.parse(JSON.stringify(state)) as JudgingState);
		const judged = judge(reading(second, value, quality), { limits, staleAfterS }, kept, { now: T0 + second * 1_000 });
		state = judged.state;
		all.push(...judged.changes);
		said.push(...judged.changes.map((one) => `${one.kind}@${(one.at - T0) / 1_000} ${one.direction} ${one.levelNow ?? '-'}`));
	}
	return { said, state: state ?? freshState(), changes: all };
}
const every = (values: (number | null)[], step = 1): [number, number | null][] => values.map((value, i) => [i * step, value]);

describe('a high limit with deadband', () => {
	it('makes one alarm of a value that bounces across the limit but not past limit − deadband [worked by hand after OPC 10000-9 Annex B.1.5]', () => {
		// High 4.5, deadband 0.2: active at the second sample, inactive at the sixth.
		expect(run([limit({ deadband: 0.2 })], every([4.4, 4.6, 4.45, 4.35, 4.6, 4.29])).said).toEqual([
			'raised@1 up alert',
			'cleared@5 up -',
		]);
	});

	it('holds at exactly the limit and one step below does not', () => {
		expect(run([limit()], every([4.5])).said).toEqual(['raised@0 up alert']);
		expect(run([limit()], every([4.499999999999999])).said).toEqual([]);
	});

	it('clears only below limit − deadband, not at it', () => {
		expect(run([limit({ value: 4, deadband: 0.5 })], every([4, 3.5])).said).toEqual(['raised@0 up alert']);
		expect(run([limit({ value: 4, deadband: 0.5 })], every([4, 3.49])).said).toEqual(['raised@0 up alert', 'cleared@1 up -']);
	});
});

describe('delays', () => {
	it('raise only after the condition has held without a break for the whole delay', () => {
		const limits = [limit({ raise_after_s: 3 })];
		expect(run(limits, every([5, 5, 5, 5])).said).toEqual(['raised@3 up alert']);
		expect(run(limits, every([5, 5, 4, 5, 5, 5])).said).toEqual([]);
	});

	it('ignore a spike of one sample', () => {
		expect(run([limit({ raise_after_s: 2 })], every([2, 90, 2, 2])).said).toEqual([]);
	});

	it('clear only after the condition has been gone without a break', () => {
		expect(run([limit({ clear_after_s: 2 })], every([5, 4, 5, 4, 4, 4])).said).toEqual(['raised@0 up alert', 'cleared@5 up -']);
	});

	it('begin anew after a break longer than the stale time', () => {
		expect(
			run(
				[limit({ raise_after_s: 20 })],
				[
					[0, 5],
					[10, 5],
					[60, 5],
					[70, 5],
				],
				30,
			).said,
		).toEqual([]);
		expect(
			run(
				[limit({ raise_after_s: 20 })],
				[
					[0, 5],
					[10, 5],
					[60, 5],
					[70, 5],
					[80, 5],
				],
				30,
			).said,
		).toEqual(['raised@80 up alert']);
	});

	it('are completed by confirmations, at the moment they ran out', () => {
		const limits = [limit({ raise_after_s: 10 })];
		const { state } = run(limits, [[0, 5]]);
		const early = confirm(state, { limits, staleAfterS: 30 }, T0 + 8_000);
		expect(early.changes).toEqual([]);
		const late = confirm(early.state, { limits, staleAfterS: 30 }, T0 + 16_000);
		expect(late.changes).toMatchObject([{ kind: 'raised', at: T0 + 10_000, value: 5 }]);
		expect(confirm(late.state, { limits, staleAfterS: 30 }, T0 + 24_000).changes).toEqual([]);
	});
});

describe('one excursion in one direction', () => {
	const pair = [limit({ deadband: 0.2 }), limit({ level: 'danger', value: 7.1, deadband: 0.2, limitId: 2 })];

	it('escalates and steps down in place and clears when its lowest level clears', () => {
		const { said, changes } = run(pair, every([4, 5, 7.5, 6.8, 4.4, 4.2]));
		expect(said).toEqual(['raised@1 up alert', 'escalated@2 up danger', 'stepped-down@3 up alert', 'cleared@5 up -']);
		expect(changes.map((one) => one.level)).toEqual(['alert', 'danger', 'danger', 'danger']);
		expect(new Set(changes.map((one) => one.raisedAt)).size).toBe(1);
	});

	it('is raised at danger at once where the value jumps there', () => {
		expect(run(pair, every([4, 8])).said).toEqual(['raised@1 up danger']);
	});

	it('stands beside one in the other direction', () => {
		expect(run([limit(), limit({ kind: 'low', value: 1, limitId: 3 })], every([5, 0.5])).said.sort()).toEqual([
			'cleared@1 up -',
			'raised@0 up alert',
			'raised@1 down alert',
		]);
	});
});

describe('qualities', () => {
	it('bad readings neither raise, clear nor break a run', () => {
		const bad = STATUS_CODES.BadSensorFailure;
		expect(
			run(
				[limit({ raise_after_s: 2 })],
				[
					[0, 5],
					[1, null, bad],
					[2, 5],
				],
			).said,
		).toEqual(['raised@2 up alert']);
		expect(
			run(
				[limit()],
				[
					[0, 5],
					[1, null, bad],
				],
			).said,
		).toEqual(['raised@0 up alert']);
	});

	it('uncertain readings count, and the alarm says so', () => {
		expect(run([limit()], [[0, 5, STATUS_CODES.UncertainEngineeringUnitsExceeded]]).changes).toMatchObject([
			{ kind: 'raised', isUncertain: true },
		]);
	});
});

describe('other kinds', () => {
	it('a low limit mirrors a high one', () => {
		expect(run([limit({ kind: 'low', value: 2, deadband: 0.5 })], every([2.1, 2, 2.4, 2.5, 2.51])).said).toEqual([
			'raised@1 down alert',
			'cleared@4 down -',
		]);
	});

	it('a deviation limit goes by mean and sigma, up and down [worked by hand: mean 2, sigma 0.5, 3 sigma is 0.5 to 3.5]', () => {
		const limits = [limit({ kind: 'deviation', value: 3, baseline: { mean: 2, sigma: 0.5 } })];
		expect(run(limits, every([3.5, 3.6, 2, 0.4])).said).toEqual(['raised@1 up alert', 'cleared@2 up -', 'raised@3 down alert']);
	});

	it('a state limit raises in its state and clears in any other', () => {
		expect(run([limit({ kind: 'state', state: 1, value: null })], every([0, 1, 1, 2])).said).toEqual([
			'raised@1 state alert',
			'cleared@3 state -',
		]);
	});

	it('a rate limit goes by the slope of least squares over its window [worked by hand: 0.1 a second is 6 a minute]', () => {
		expect(
			ratePerMinute([
				[0, 0],
				[1_000, 0.1],
				[2_000, 0.2],
			]),
		).toBeCloseTo(6, 12);
		expect(ratePerMinute([[0, 0]])).toBeNull();
		expect(run([limit({ kind: 'rate', value: 5, window_s: 10 })], every([0, 0.05, 0.1, 0.3, 0.6])).said[0]).toMatch(
			/^raised@\d up alert$/,
		);
	});

	it('a stale limit raises when nothing comes, and clears with the next reading', () => {
		const limits = [limit({ kind: 'stale', value: null })];
		const { state } = run(limits, [[0, 2]]);
		const stale = goStale(state, { limits, staleAfterS: 30 }, T0 + 31_000);
		expect(stale.changes).toMatchObject([{ kind: 'raised', direction: 'stale', at: T0 + 31_000 }]);
		expect(goStale(stale.state, { limits, staleAfterS: 30 }, T0 + 40_000).changes).toEqual([]);
		const back = judge(reading(50, 2), { limits, staleAfterS: 30 }, stale.state, { now: T0 + 50_000 });
		expect(back.changes).toMatchObject([{ kind: 'cleared', direction: 'stale' }]);
		expect(back.isLimitEdge).toBe(true);
	});
});

describe('stale limits with seconds of their own', () => {
	it('raise and escalate as the silence goes on', () => {
		const limits = [limit({ kind: 'stale', value: 60 }), limit({ kind: 'stale', value: 120, level: 'danger', limitId: 2 })];
		const plan = { limits, staleAfterS: 30 };
		const { state } = run(limits, [[0, 2]]);
		const first = goStale(state, plan, T0 + 31_000, 31);
		expect(first.changes).toEqual([]);
		const second = goStale(first.state, plan, T0 + 61_000, 61);
		expect(second.changes).toMatchObject([{ kind: 'raised', direction: 'stale', level: 'alert', at: T0 + 61_000 }]);
		const third = goStale(second.state, plan, T0 + 121_000, 121);
		expect(third.changes).toMatchObject([{ kind: 'escalated', level: 'danger', raisedAt: T0 + 61_000 }]);
		expect(goStale(third.state, plan, T0 + 500_000, 500).changes).toEqual([]);
	});
});

describe('order and clocks', () => {
	it('a reading not after the last judged one is late and never judged live', () => {
		const { state } = run([limit()], [[10, 2]]);
		const late = judge(reading(5, 9), { limits: [limit()], staleAfterS: 30 }, state, { now: T0 + 11_000 });
		expect(late).toMatchObject({ isLate: true, changes: [] });
		expect(late.state).toBe(state);
	});

	it('one stamp ahead of the clock does not blind the tag', () => {
		const ahead = judge(reading(200, 2), { limits: [limit()], staleAfterS: 30 }, null, { now: T0 });
		const next = judge(reading(1, 5), { limits: [limit()], staleAfterS: 30 }, ahead.state, { now: T0 + 1_000 });
		expect(next).toMatchObject({ isLate: false, changes: [{ kind: 'raised' }] });
	});

	const late = (limits: PlannedLimit[], samples: [number, number][], isEnd = true, stretch = freshStretch()) =>
		judgeLate(
			{ ...stretch, readings: samples.map(([second, value]) => reading(second, value)) },
			{ limits, staleAfterS: 30 },
			T0 + 1_000_000,
			isEnd,
		);
	const said = (changes: readonly AlarmChange[]) =>
		changes.map((one) => `${one.kind} ${one.level} ${(one.raisedAt - T0) / 1_000}–${(one.at - T0) / 1_000} ${one.isLate}`);

	it('what arrives behind live data is judged as one stretch in the order of time, and its excursion is found whole', () => {
		expect(
			said(
				late(
					[limit()],
					[
						[3, 4],
						[1, 5],
						[2, 5],
					],
				).found,
			),
		).toEqual(['found alert 1–3 true']);
	});

	it('a delay runs over the readings of a late stretch: 20 s above the limit raise a limit that asks for 15 s', () => {
		const delayed = [limit({ raise_after_s: 15 })];
		expect(
			said(
				late(delayed, [
					[0, 5],
					[10, 5],
					[20, 5],
					[30, 4],
				]).found,
			),
		).toEqual(['found alert 20–30 true']);
		expect(
			late(delayed, [
				[0, 5],
				[10, 5],
				[14, 4],
			]).found,
		).toEqual([]);
	});

	it('an excursion that stands at the end of a late stretch ends with its last reading, at the highest level reached', () => {
		const two = [limit(), limit({ level: 'danger', value: 7.1, limitId: 2 })];
		const { found } = late(two, [
			[0, 5],
			[10, 8],
			[20, 6],
		]);
		expect(said(found)).toEqual(['found danger 0–20 true']);
		expect(found[0]?.limitId).toBe(2);
	});

	it('a stretch judged in two parts finds one excursion', () => {
		const first = late(
			[limit()],
			[
				[0, 5],
				[10, 5],
			],
			false,
		);
		expect(first.found).toEqual([]);
		expect(
			said(
				late(
					[limit()],
					[
						[20, 5],
						[30, 4],
					],
					true,
					first.stretch,
				).found,
			),
		).toEqual(['found alert 0–30 true']);
	});
});

describe('where an alarm stands [transitions after ISA-18.2, from memory]', () => {
	it.each([
		[null, null, 'active-unacknowledged'],
		[null, T0, 'active-acknowledged'],
		[T0, null, 'returned-unacknowledged'],
		[T0, T0, 'closed'],
	] as const)('cleared %s, acknowledged %s: %s', (clearedAt, acknowledgedAt, state) => {
		expect(alarmStateOf({ clearedAt, acknowledgedAt })).toBe(state);
	});
});
