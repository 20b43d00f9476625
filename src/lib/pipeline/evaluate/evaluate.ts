// Pure.
import type { AlarmDirection, LimitLevel } from '#lib/domain/limit.ts';
import { severityOf } from '#lib/domain/quality.ts';
import type { Reading, Verdict } from '#lib/domain/reading.ts';
import type { PlannedLimit, TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { conditionOf } from './condition.ts';
import { freshState, type AlarmChange, type JudgingState, type LimitRun } from './judging-state.ts';
import { ratePerMinute } from './rate.ts';

export { freshState };
export type { AlarmChange, JudgingState };

type JudgedPlan = Pick<TagPlan, 'limits' | 'staleAfterS'>;

export interface Judgement {
	verdict: Verdict;
	state: JudgingState;
	changes: AlarmChange[];
	/** The reading began or ended a limit's condition, or moved an alarm: it is stored whatever the deadband. */
	isLimitEdge: boolean;
	/** Not after the last judged reading: stored and fed, never judged live. */
	isLate: boolean;
}

/** Wall-clock facts that judging needs, given by the caller. */
export interface JudgeOptions {
	now: number;
	/** How close to the wall clock a reading must be to take over from a last one that lies ahead of it. */
	nearMs?: number;
}

const NEAR_MS = 300_000;
const NONE: AlarmChange[] = [];

/**
 * Judges one reading against its tag's limits. Readings of a tag come in the order of their time; one that is not after the last judged is late.
 * The state given is not changed; a tag without limits costs no more than a comparison.
 */
export function judge(reading: Reading, plan: JudgedPlan, before: JudgingState | null, options: JudgeOptions): Judgement {
	const previous = before ?? freshState();
	const { lastAt } = previous;
	if (lastAt !== null && reading.at <= lastAt) {
		// One wrong stamp ahead of the wall clock must not blind the tag: the next sound reading begins again.
		const isAhead = lastAt > options.now && Math.abs(reading.at - options.now) <= (options.nearMs ?? NEAR_MS);
		if (!isAhead)
			return { verdict: verdictOf(previous, reading), state: previous, changes: NONE, isLimitEdge: false, isLate: true };
		return judge(reading, plan, restarted(previous), options);
	}
	const severity = severityOf(reading.quality);
	// Bad readings neither raise, clear nor break a run.
	if (severity === 'bad' || reading.value === null) {
		return { verdict: 'unknown', state: { ...previous, lastAt: reading.at }, changes: NONE, isLimitEdge: false, isLate: false };
	}
	const state: JudgingState = {
		lastAt: reading.at,
		lastValue: reading.value,
		aliveAt: reading.at,
		runs: previous.runs,
		open: previous.open,
		window: previous.window,
		isStale: false,
	};
	if (plan.limits.length === 0) {
		return { verdict: 'normal', state, changes: NONE, isLimitEdge: previous.isStale, isLate: false };
	}
	const changes: AlarmChange[] = [];
	let isLimitEdge = previous.isStale;
	const isBroken = previous.aliveAt !== null && reading.at - previous.aliveAt > plan.staleAfterS * 1_000;
	state.window = windowAfter(previous.window, plan.limits, reading.at, reading.value);
	const runs: Record<string, LimitRun> = {};
	const directions = new Map<AlarmDirection, { limit: PlannedLimit; run: LimitRun }[]>();
	for (const limit of plan.limits) {
		if (limit.kind === 'stale') {
			runs[limit.limitId] = freshRun();
			addTo(directions, 'stale', limit, freshRun());
			continue;
		}
		const was = previous.runs[limit.limitId] ?? freshRun();
		const rate = limit.kind === 'rate' ? rateIn(state.window, reading.at, limit.window_s ?? 0) : null;
		const condition = conditionOf(
			limit,
			reading.value,
			rate,
			was.holdsSince !== null || (was.isRaised && was.goneSince === null),
		);
		const run =
			condition === null
				? was
				: stepRun(was, condition.holds, reading.at, reading.value, severity === 'uncertain', isBroken, limit);
		if ((run.holdsSince === null) !== (was.holdsSince === null) || run.isRaised !== was.isRaised) isLimitEdge = true;
		runs[limit.limitId] = run;
		addTo(directions, condition?.direction ?? directionOfOpen(previous, limit), limit, run);
	}
	state.runs = runs;
	state.open = settle(previous, directions, reading.at, reading.value, false, changes);
	return { verdict: verdictOf(state, reading), state, changes, isLimitEdge: isLimitEdge || changes.length > 0, isLate: false };
}

/**
 * The last value still stands at `at` (a keep-alive): completes raise and clear delays, at the moment they ran out. Changes nothing else.
 */
export function confirm(
	before: JudgingState,
	plan: JudgedPlan,
	at: number,
): { state: JudgingState; changes: AlarmChange[]; verdict: Verdict } {
	if (before.lastValue === null || before.lastAt === null || at <= before.lastAt || plan.limits.length === 0) {
		return { state: { ...before, aliveAt: Math.max(before.aliveAt ?? at, at) }, changes: NONE, verdict: levelNow(before) };
	}
	const changes: AlarmChange[] = [];
	const runs: Record<string, LimitRun> = {};
	const directions = new Map<AlarmDirection, { limit: PlannedLimit; run: LimitRun }[]>();
	const isBroken = before.aliveAt !== null && at - before.aliveAt > plan.staleAfterS * 1_000;
	for (const limit of plan.limits) {
		const was = before.runs[limit.limitId] ?? freshRun();
		const run = limit.kind === 'stale' || isBroken ? was : completed(was, limit, at);
		runs[limit.limitId] = run;
		const condition = conditionOf(limit, before.lastValue, null, was.isRaised || was.holdsSince !== null);
		addTo(directions, limit.kind === 'stale' ? 'stale' : (condition?.direction ?? directionOfOpen(before, limit)), limit, run);
	}
	const state: JudgingState = { ...before, aliveAt: at, runs };
	state.open = settle(before, directions, at, before.lastValue, true, changes);
	return { state, changes, verdict: levelNow(state) };
}

/**
 * Nothing came for `silentS` seconds, at least the stale time: pending delays start anew afterwards, and stale limits raise whose own
 * seconds, if they give any, have passed. Asked again as the silence goes on, it raises or escalates by those that are due then.
 */
export function goStale(
	before: JudgingState,
	plan: JudgedPlan,
	at: number,
	silentS = Number.POSITIVE_INFINITY,
): { state: JudgingState; changes: AlarmChange[] } {
	const changes: AlarmChange[] = [];
	const runs: Record<string, LimitRun> = {};
	for (const [id, run] of Object.entries(before.runs))
		runs[id] = run.isRaised ? { ...run, goneSince: null } : { ...run, holdsSince: null };
	const due = plan.limits.filter((limit) => limit.kind === 'stale' && (limit.value ?? 0) <= silentS);
	const state: JudgingState = { ...before, runs, isStale: true, open: { ...before.open } };
	const worst = due.find((limit) => limit.level === 'danger') ?? due[0];
	const open = state.open.stale;
	if (worst && !open) {
		state.open.stale = { raisedAt: at, level: worst.level, levelNow: worst.level };
		changes.push(change('raised', 'stale', worst, state.open.stale, at, null, false));
	} else if (worst && open && worst.level === 'danger' && open.levelNow !== 'danger') {
		state.open.stale = { raisedAt: open.raisedAt, level: 'danger', levelNow: 'danger' };
		changes.push(change('escalated', 'stale', worst, state.open.stale, at, null, false));
	}
	return { state, changes };
}

function freshRun(): LimitRun {
	return { holdsSince: null, goneSince: null, isRaised: false, value: null, isUncertain: false };
}

/** State after a stamp ahead of the clock was given up: alarms stay open, pending delays begin anew. */
function restarted(state: JudgingState): JudgingState {
	const runs: Record<string, LimitRun> = {};
	for (const [id, run] of Object.entries(state.runs)) runs[id] = { ...run, holdsSince: null, goneSince: null };
	return { ...state, lastAt: null, aliveAt: null, runs, window: [] };
}

function stepRun(
	was: LimitRun,
	holds: boolean,
	at: number,
	value: number,
	isUncertain: boolean,
	isBroken: boolean,
	limit: PlannedLimit,
): LimitRun {
	const raiseMs = (limit.raise_after_s ?? 0) * 1_000;
	const clearMs = (limit.clear_after_s ?? 0) * 1_000;
	if (!was.isRaised) {
		if (!holds) return was.holdsSince === null ? was : freshRun();
		// A break longer than the stale time restarts a pending delay.
		const isNew = was.holdsSince === null || isBroken;
		const since = isNew ? at : (was.holdsSince ?? at);
		return { holdsSince: since, goneSince: null, isRaised: at - since >= raiseMs, value: isNew ? value : was.value, isUncertain };
	}
	if (holds) return { holdsSince: was.holdsSince ?? at, goneSince: null, isRaised: true, value: was.value, isUncertain };
	const gone = was.goneSince === null || isBroken ? at : was.goneSince;
	return at - gone >= clearMs ? freshRun() : { holdsSince: null, goneSince: gone, isRaised: true, value: was.value, isUncertain };
}

/** A run that a confirmation carries past its delay. */
function completed(was: LimitRun, limit: PlannedLimit, at: number): LimitRun {
	if (!was.isRaised && was.holdsSince !== null && at - was.holdsSince >= (limit.raise_after_s ?? 0) * 1_000)
		return { ...was, isRaised: true };
	if (was.isRaised && was.goneSince !== null && at - was.goneSince >= (limit.clear_after_s ?? 0) * 1_000) return freshRun();
	return was;
}

function addTo(
	map: Map<AlarmDirection, { limit: PlannedLimit; run: LimitRun }[]>,
	direction: AlarmDirection,
	limit: PlannedLimit,
	run: LimitRun,
): void {
	const list = map.get(direction);
	if (list) list.push({ limit, run });
	else map.set(direction, [{ limit, run }]);
}

function directionOfOpen(state: JudgingState, limit: PlannedLimit): AlarmDirection {
	if (limit.kind === 'low') return 'down';
	if (limit.kind === 'rate') return (limit.value ?? 0) < 0 ? 'down' : 'up';
	if (limit.kind === 'deviation') return state.open.down && !state.open.up ? 'down' : 'up';
	return limit.kind === 'state' ? 'state' : limit.kind === 'stale' ? 'stale' : 'up';
}

/** Opens, escalates, steps down and clears excursions by which limits are raised: at most one a direction. */
function settle(
	before: JudgingState,
	directions: Map<AlarmDirection, { limit: PlannedLimit; run: LimitRun }[]>,
	at: number,
	value: number | null,
	isConfirmation: boolean,
	changes: AlarmChange[],
): JudgingState['open'] {
	const open = { ...before.open };
	// A direction that no limit speaks of any more (a limit was taken away, a deviation changed sides) is settled too.
	for (const direction of Object.keys(open) as AlarmDirection[]) if (!directions.has(direction)) directions.set(direction, []);
	for (const [direction, list] of directions) {
		const raised = list.filter(({ run }) => run.isRaised);
		const worst = raised.find(({ limit }) => limit.level === 'danger') ?? raised[0];
		const now = open[direction];
		if (!worst) {
			if (!now) continue;
			delete open[direction];
			const limit = list[0]?.limit;
			changes.push(change('cleared', direction, limit ?? null, now, at, value, false));
			continue;
		}
		if (!now) {
			// A reading raises at its own time. Where the last value was only confirmed, the delay ran out in between: that moment is known.
			const ranOut = worst.run.holdsSince === null ? at : worst.run.holdsSince + (worst.limit.raise_after_s ?? 0) * 1_000;
			const raisedAt = isConfirmation ? Math.min(ranOut, at) : at;
			open[direction] = { raisedAt, level: worst.limit.level, levelNow: worst.limit.level };
			changes.push(change('raised', direction, worst.limit, open[direction], raisedAt, value, worst.run.isUncertain));
		} else if (now.levelNow !== worst.limit.level) {
			const level: LimitLevel = now.level === 'danger' ? 'danger' : worst.limit.level;
			open[direction] = { raisedAt: now.raisedAt, level, levelNow: worst.limit.level };
			const kind = worst.limit.level === 'danger' ? 'escalated' : 'stepped-down';
			changes.push(change(kind, direction, worst.limit, open[direction], at, value, worst.run.isUncertain));
		}
	}
	return open;
}

function change(
	kind: AlarmChange['kind'],
	direction: AlarmDirection,
	limit: PlannedLimit | null,
	alarm: { raisedAt: number; level: LimitLevel; levelNow: LimitLevel },
	at: number,
	value: number | null,
	isUncertain: boolean,
): AlarmChange {
	return {
		kind,
		direction,
		limitKind: limit?.kind ?? (direction === 'down' ? 'low' : direction === 'up' ? 'high' : direction),
		level: alarm.level,
		levelNow: kind === 'cleared' ? null : alarm.levelNow,
		at,
		raisedAt: alarm.raisedAt,
		value,
		isUncertain,
		limitId: limit?.limitId ?? 0,
		isLate: false,
	};
}

/** Keeps the readings that the longest rate window still asks for. */
function windowAfter(window: [number, number][], limits: readonly PlannedLimit[], at: number, value: number): [number, number][] {
	let longestS = 0;
	for (const limit of limits) if (limit.kind === 'rate') longestS = Math.max(longestS, limit.window_s ?? 0);
	if (longestS === 0) return window;
	const kept = window.filter(([t]) => t >= at - longestS * 1_000);
	kept.push([at, value]);
	return kept;
}

function rateIn(window: [number, number][], at: number, windowS: number): number | null {
	return ratePerMinute(window.filter(([t]) => t >= at - windowS * 1_000));
}

function levelNow(state: JudgingState): Verdict {
	let verdict: Verdict = 'normal';
	for (const [direction, alarm] of Object.entries(state.open)) {
		if (direction === 'stale' || !alarm) continue;
		if (alarm.levelNow === 'danger') return 'danger';
		verdict = 'alert';
	}
	return verdict;
}

function verdictOf(state: JudgingState, reading: Reading): Verdict {
	return severityOf(reading.quality) === 'bad' || reading.value === null ? 'unknown' : levelNow(state);
}
