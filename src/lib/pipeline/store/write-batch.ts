// Edge: store. Types of what the collector hands over; may touch: domain and evaluate types.
import type { Reading, TestReading, Verdict } from '#lib/domain/reading.ts';
import type { AlarmChange, JudgingState } from '#lib/pipeline/evaluate/evaluate.ts';

/** A reading that goes into history; `rawKept` is the raw scalar where history must keep it. */
export interface StoredReading extends Reading {
	siteId: number;
	rawKept: string | null;
}

/** The newest reading of a tag, stored or not. */
export interface LatestUpdate {
	tagId: number;
	at: number;
	value: number | null;
	quality: number;
	receivedAt: number;
	confirmedAt: number;
	isHubTime: boolean;
	sourceAt: number | null;
	reason: string | null;
	raw: string | null;
	wire: string | null;
	verdict: Verdict;
	isStale: boolean;
	revision: number;
	/** A newest time ahead of the clock was given up: `at` may move back this once. */
	resets: boolean;
}

export interface Confirmation {
	tagId: number;
	confirmedAt: number;
	verdict: Verdict;
}

export type TagAlarmChange = AlarmChange & { tagId: number; siteId: number; isTest: boolean };

/** A source was lost, or gives values again: its one connection alarm, and the event that receivers are told with it. */
export interface ConnectionChange {
	kind: 'lost' | 'back';
	sourceId: string;
	siteId: number;
	source: string;
	at: number;
	/** Stale alarms suppressed as its consequence, so far. */
	suppressed: number;
}

/** Something a receiver must know beside readings. */
export interface FeedEvent {
	siteId: number;
	event: 'tag-renamed' | 'tag-retired' | 'tag-unit-changed' | 'tag-added' | 'source-lost' | 'source-back';
	at: number;
	tagId?: number;
	tag?: string;
	[detail: string]: unknown;
}

/** Everything that belongs into one transaction. */
export interface WriteBatch {
	readings: readonly StoredReading[];
	latest: readonly LatestUpdate[];
	confirmations: readonly Confirmation[];
	alarmChanges: readonly TagAlarmChange[];
	connections: readonly ConnectionChange[];
	judgingStates: readonly { tagId: number; state: JudgingState }[];
	testReadings: readonly (TestReading & { siteId: number })[];
	events: readonly FeedEvent[];
}

export interface WriteResult {
	stored: number;
	duplicates: number;
	deadLetters: number;
	/** Last feed position by site. */
	positions: Map<number, number>;
}

export const EMPTY_BATCH: WriteBatch = {
	readings: [],
	latest: [],
	confirmations: [],
	alarmChanges: [],
	connections: [],
	judgingStates: [],
	testReadings: [],
	events: [],
};
