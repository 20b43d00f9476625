// Pure.
import type { PlannedLimit } from '#lib/domain/tag-map/tag-plan.ts';
import { severityOf } from '#lib/domain/quality.ts';
import type { Reading } from '#lib/domain/reading.ts';
import { freshState, judge, type JudgingState } from './evaluate.ts';

/** What one limit would have done over a stretch of stored readings. */
export interface ReplayCount {
	raises: number;
	/** Seconds in alarm in all, and the longest excursion. */
	alarmS: number;
	longestS: number;
	firstAt: number | null;
	lastAt: number | null;
	/** It still stood at the end of the stretch. */
	isOpen: boolean;
}

export interface Replay {
	/** The next stored reading, in the order of time. */
	take(reading: Reading): void;
	/** Counts up to `at`, the end of the stretch, by limit in the order given. */
	finish(at: number): ReplayCount[];
}

/**
 * Judges stored readings by each limit alone, as live readings are judged. That a tag had gone stale is known by the reading without value that
 * said so, not by the distance of readings: one whose value did not change stores none. Keep-alives are not stored, so that a delay that one of
 * them completed is seen here at the next stored reading.
 */
export function createReplay(limits: readonly PlannedLimit[]): Replay {
	const lanes = limits.map((limit) => ({
		limits: [limit],
		state: freshState() as JudgingState,
		count: fresh(),
		raisedAt: null as number | null,
	}));
	let wasStale = false;
	return {
		take(reading) {
			if (severityOf(reading.quality) === 'bad' || reading.value === null) {
				if (reading.quality >>> 0 === NO_COMMUNICATION) wasStale = true;
				return;
			}
			const staleAfterS = wasStale ? 0 : Number.POSITIVE_INFINITY;
			wasStale = false;
			for (const lane of lanes) {
				const judged = judge(reading, { limits: lane.limits, staleAfterS }, lane.state, { now: reading.at });
				lane.state = judged.state;
				for (const change of judged.changes) {
					if (change.kind === 'raised') {
						lane.raisedAt = change.at;
						lane.count.raises += 1;
						lane.count.firstAt ??= change.at;
						lane.count.lastAt = change.at;
					}
					if (change.kind === 'cleared' && lane.raisedAt !== null) {
						close(lane.count, lane.raisedAt, change.at);
						lane.raisedAt = null;
					}
				}
			}
		},
		finish: (at) =>
			lanes.map(({ count, raisedAt }) => {
				const whole = { ...count };
				if (raisedAt !== null) close(whole, raisedAt, at);
				return { ...whole, isOpen: raisedAt !== null };
			}),
	};
}

/** `BadNoCommunication` [OPC 10000-4 §7.39]: how going stale is told. */
const NO_COMMUNICATION = 0x80310000;

function fresh(): ReplayCount {
	return { raises: 0, alarmS: 0, longestS: 0, firstAt: null, lastAt: null, isOpen: false };
}

function close(count: ReplayCount, from: number, to: number): void {
	const seconds = Math.max(0, (to - from) / 1_000);
	count.alarmS += seconds;
	count.longestS = Math.max(count.longestS, seconds);
}
