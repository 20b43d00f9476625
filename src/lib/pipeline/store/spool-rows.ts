// Pure.
import type { JudgingState } from '#lib/pipeline/evaluate/judging-state.ts';
import type { ConnectionChange, LatestUpdate, TagAlarmChange } from './write-batch.ts';

/** Goes up with every change of the tables; a file of another version is not read. */
export const SPOOL_VERSION = 1;

/**
 * Readings lie packed, a row a commit. Changes of alarms and connections have rows of their own, since they are delivered first and in their order.
 * Of each tag only the newest state counts. Losses wait here until they are told.
 */
export const SPOOL_SCHEMA = `
CREATE TABLE batches (seq INTEGER PRIMARY KEY AUTOINCREMENT, taken_at INTEGER NOT NULL, readings INTEGER NOT NULL, by_source TEXT NOT NULL) STRICT;
CREATE TABLE packs (seq INTEGER PRIMARY KEY, packed BLOB NOT NULL) STRICT;
CREATE TABLE changes (seq INTEGER PRIMARY KEY AUTOINCREMENT, source_id TEXT NOT NULL, is_foreign INTEGER NOT NULL DEFAULT 0, kind TEXT NOT NULL, change TEXT NOT NULL) STRICT;
CREATE TABLE tags (tag_id INTEGER PRIMARY KEY, source_id TEXT NOT NULL, stamp INTEGER NOT NULL, judging TEXT, latest TEXT, resets INTEGER NOT NULL DEFAULT 0) STRICT;
CREATE TABLE losses (source_id TEXT NOT NULL, reason TEXT NOT NULL, from_at INTEGER NOT NULL, to_at INTEGER NOT NULL, count INTEGER NOT NULL, PRIMARY KEY (source_id, reason)) STRICT`;

/** A row of readings without what is packed; `bySource` counts them by the id of their source. */
export interface BatchRow {
	seq: number;
	takenAt: number;
	readings: number;
	bySource: readonly (readonly [sourceId: string, readings: number])[];
}

export type SpooledChange = { kind: 'alarm'; change: TagAlarmChange } | { kind: 'connection'; change: ConnectionChange };

/** The newest state of a tag; a part that did not change while the database was away is null. */
export interface SpooledTag {
	tagId: number;
	judging: JudgingState | null;
	latest: LatestUpdate | null;
}

/**
 * What changes of alarms are worth once another collector has run their source meanwhile: an excursion that began here is recorded closed, as found
 * afterwards, from its beginning to its end as far as either is known here, and nobody is called. Everything else is that collector's to say.
 */
export function asFoundAfterwards(changes: readonly TagAlarmChange[]): TagAlarmChange[] {
	const found = new Map<string, TagAlarmChange>();
	for (const change of changes) {
		if (change.isTest) continue;
		const key = `${change.tagId} ${change.direction} ${change.raisedAt}`;
		const begun = found.get(key);
		if (change.kind === 'found') found.set(`found ${key}`, change);
		else if (change.kind === 'raised')
			found.set(key, { ...change, kind: 'found', levelNow: null, isLate: true, at: change.raisedAt });
		else if (begun) found.set(key, { ...begun, level: change.level, at: Math.max(begun.at, change.at) });
	}
	return [...found.values()];
}
