// Pure.
import type { AlarmDirection } from '#lib/domain/limit.ts';
import type { Reading } from '#lib/domain/reading.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { freshState, judge, type AlarmChange, type JudgingState } from './evaluate.ts';

/** Readings of one tag that arrived behind live data and belong together, and what judging them has come to so far. */
export interface LateStretch {
	/** Not judged yet, in the order of arrival. */
	readings: Reading[];
	state: JudgingState;
	/** Excursions that began and have not ended yet, by direction. */
	open: Partial<Record<AlarmDirection, AlarmChange>>;
	/** Time of the newest usable reading judged. */
	lastAt: number | null;
}

/** Most readings of a stretch that wait to be judged: then those that are there are judged, and the stretch goes on. */
export const MOST_LATE = 500;

export function freshStretch(): LateStretch {
	return { readings: [], state: freshState(), open: {}, lastAt: null };
}

/**
 * Judges what waits of a stretch, apart from the live state, in the order of time. Answers whole excursions as `found`: `raisedAt` to `at`,
 * with the highest level reached. At the stretch's end one that still stands ends with the last reading, since live judging has gone on from there.
 */
export function judgeLate(
	stretch: LateStretch,
	plan: Pick<TagPlan, 'limits' | 'staleAfterS'>,
	now: number,
	isEnd: boolean,
): { stretch: LateStretch; found: AlarmChange[] } {
	const open = { ...stretch.open };
	const found: AlarmChange[] = [];
	let { state, lastAt } = stretch;
	const end = (direction: AlarmDirection, at: number): void => {
		const begun = open[direction];
		if (!begun) return;
		delete open[direction];
		found.push({ ...begun, kind: 'found', levelNow: null, at });
	};
	for (const reading of [...stretch.readings].sort((a, b) => a.at - b.at)) {
		const judged = judge(reading, plan, state, { now });
		state = judged.state;
		if (!judged.isLate && reading.value !== null) lastAt = reading.at;
		for (const change of judged.changes) {
			if (change.kind === 'cleared') end(change.direction, change.at);
			else if (change.kind === 'raised') open[change.direction] = { ...change, isLate: true };
			else {
				const begun = open[change.direction];
				// Its highest level, with the limit that gave it.
				if (begun && change.kind === 'escalated')
					open[change.direction] = { ...begun, level: change.level, limitId: change.limitId, limitKind: change.limitKind };
			}
		}
	}
	if (isEnd) for (const direction of Object.keys(open) as AlarmDirection[]) end(direction, lastAt ?? now);
	return { stretch: { readings: [], state, open, lastAt }, found };
}
