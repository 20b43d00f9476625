import { describe, expect, it } from 'vitest';
import { asFoundAfterwards } from './spool-rows.ts';
import type { TagAlarmChange } from './write-batch.ts';

const change = (extra: Partial<TagAlarmChange>): TagAlarmChange => ({
	kind: 'raised',
	direction: 'up',
	limitKind: 'high',
	level: 'alert',
	levelNow: 'alert',
	at: 1_000,
	raisedAt: 1_000,
	value: 9,
	isUncertain: false,
	limitId: 1,
	isLate: false,
	isTest: false,
	tagId: 1,
	siteId: 1,
	...extra,
});

// By the rule of semantics: who found a source run by another collector meanwhile records what began and ended as found afterwards.
describe('changes of alarms of a source that another collector has run meanwhile', () => {
	it('become one closed record an excursion, from its beginning to its end, at the highest level', () => {
		const found = asFoundAfterwards([
			change({}),
			change({ kind: 'escalated', level: 'danger', levelNow: 'danger', at: 2_000 }),
			change({ kind: 'cleared', level: 'danger', levelNow: null, at: 3_000, value: 1 }),
			change({ at: 5_000, raisedAt: 5_000, value: 8 }),
		]);
		expect(found).toEqual([
			change({ kind: 'found', level: 'danger', levelNow: null, at: 3_000, isLate: true }),
			change({ kind: 'found', levelNow: null, at: 5_000, raisedAt: 5_000, value: 8, isLate: true }),
		]);
	});

	it('say nothing of an alarm that stood before, nor of tests; what was found afterwards already stays', () => {
		const late = change({ kind: 'found', levelNow: null, isLate: true, raisedAt: 500, at: 700 });
		expect(
			asFoundAfterwards([
				change({ kind: 'cleared', levelNow: null, at: 3_000, raisedAt: 200 }),
				change({ isTest: true, tagId: 2 }),
				late,
			]),
		).toEqual([late]);
	});
});
