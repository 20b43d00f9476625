// Pure.
import type { AlarmDirection, LimitKind, LimitLevel } from '#lib/domain/limit.ts';

/** What one limit remembers between readings. Times are the readings' own, milliseconds. */
export interface LimitRun {
	/** Since when the condition has held without a break; null while it does not. */
	holdsSince: number | null;
	/** Since when it has been gone without a break, while the limit is raised; null otherwise. */
	goneSince: number | null;
	/** The limit has raised and not yet cleared. */
	isRaised: boolean;
	/** Value of the reading that began the run. */
	value: number | null;
	/** Time and value of the reading that would raise it first, for an alarm that a confirmation completes. */
	isUncertain: boolean;
}

/** An open excursion in one direction. */
export interface OpenAlarm {
	raisedAt: number;
	level: LimitLevel;
	levelNow: LimitLevel;
}

/**
 * Everything evaluation must remember of a tag; plain JSON, kept with the readings that made it, so that a restart in the middle of a delay
 * neither loses nor doubles an alarm.
 */
export interface JudgingState {
	/** Time of the newest judged reading; null before the first. */
	lastAt: number | null;
	lastValue: number | null;
	/** Newest time at which the value was read or confirmed. */
	aliveAt: number | null;
	/** By the limit's stored id. */
	runs: Record<string, LimitRun>;
	/** By direction. */
	open: Partial<Record<AlarmDirection, OpenAlarm>>;
	/** Readings in the window of rate limits: [time, value]. */
	window: [number, number][];
	isStale: boolean;
	/** Changes of the stale alarm that are held back while their source is lost; absent when there are none. */
	heldBack?: AlarmChange[];
}

/** A change of an alarm that travels with the readings that made it. */
export interface AlarmChange {
	/** `found`: a whole excursion known only afterwards, from `raisedAt` to `at`. */
	kind: 'raised' | 'escalated' | 'stepped-down' | 'cleared' | 'found';
	direction: AlarmDirection;
	limitKind: LimitKind;
	/** Highest level reached so far. */
	level: LimitLevel;
	/** Level after the change; null when cleared. */
	levelNow: LimitLevel | null;
	at: number;
	/** When the excursion was raised; tells which alarm is meant. */
	raisedAt: number;
	value: number | null;
	isUncertain: boolean;
	limitId: number;
	/** Found behind live data: recorded, nobody is called. */
	isLate: boolean;
}

/** The state of a tag that was never judged. */
export function freshState(): JudgingState {
	return { lastAt: null, lastValue: null, aliveAt: null, runs: {}, open: {}, window: [], isStale: false };
}
