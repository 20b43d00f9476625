// Pure.
import type { Reading } from '#lib/domain/reading.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { freshState, judge, type AlarmChange } from './evaluate.ts';

/**
 * Judges a stretch of readings that arrived behind live data, apart from the live state, in the order of their time.
 * Alarms that began and ended within the stretch are recorded as found afterwards; one still open at its end is closed with the last reading,
 * since live judging has gone on from there by itself.
 */
export function judgeLate(
	readings: readonly Reading[],
	plan: Pick<TagPlan, 'limits' | 'staleAfterS'>,
	now: number,
): AlarmChange[] {
	const ordered = [...readings].sort((a, b) => a.at - b.at);
	let state = freshState();
	const changes: AlarmChange[] = [];
	for (const reading of ordered) {
		const judged = judge(reading, plan, state, { now });
		state = judged.state;
		changes.push(...judged.changes);
	}
	const last = ordered.at(-1);
	for (const [direction, alarm] of Object.entries(state.open)) {
		const raised = changes.findLast((one) => one.direction === direction && one.raisedAt === alarm?.raisedAt);
		if (raised && last) changes.push({ ...raised, kind: 'cleared', levelNow: null, at: last.at, value: last.value });
	}
	return changes.map((one) => ({ ...one, isLate: true }));
}
