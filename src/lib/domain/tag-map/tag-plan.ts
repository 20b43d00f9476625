// Pure.
import type { Limit } from '../limit.ts';
import type { Detector } from './row.ts';
import type { Address } from './address.ts';

/** A limit as the collector judges by it: `limitId` is the stored row that an alarm keeps. */
export type PlannedLimit = Limit & { limitId: number };

/** A published row compiled for the pipeline: defaults filled in, names resolved to ids, everything in the form the hot path wants. */
export interface TagPlan {
	tagId: number;
	tag: string;
	siteId: number;
	sourceId: string;
	revision: number;
	address: Address;
	intervalMs: number;
	scale: number;
	offset: number;
	rawUnit: string;
	rawDetector: Detector;
	unit: string;
	detector: Detector;
	frequencyHz: number | null;
	/** value = (raw × scale + offset) × factor + offset of this line. */
	conversion: { factor: number; offset: number };
	lowRange: number | null;
	highRange: number | null;
	/** Null stores every reading; 0 only changes; above 0 in the tag's unit. */
	deadband: number | null;
	expectedEveryS: number | null;
	/** Resolved: the row's own, or three times the larger of interval and expected interval, at least 10 s. */
	staleAfterS: number;
	frozenAfterS: number | null;
	/** Companions: tag ids of the same source. */
	timeTagId: number | null;
	ageTagId: number | null;
	validTagId: number | null;
	validWhen: string | null;
	sentinels: readonly (number | string)[];
	states: ReadonlyMap<number, string> | null;
	/** From the source's settings: whose time counts, or a fixed offset in seconds. */
	timePolicy: 'source' | 'hub' | number;
	limits: readonly PlannedLimit[];
}
