// Pure.
import { z } from 'zod';

/** Days that each kind of data is kept. */
export interface Retention {
	/** Days that readings stay rows before they are packed. */
	rowDays: number;
	rawDays: number;
	minuteDays: number;
	hourDays: number;
	journalDays: number;
	/** Exchanges kept around a source's failures. */
	exchangeDays: number;
}

export const RETENTION: Retention = {
	rowDays: 7,
	rawDays: 400,
	minuteDays: 730,
	hourDays: 3_650,
	journalDays: 14,
	exchangeDays: 30,
};

/** A century; far longer than any disk lasts. */
export const MOST_DAYS = 36_500;
/** Packing never takes a day younger than this, so that a writer need not ask for what is fresh. */
export const LEAST_ROW_DAYS = 3;

const days = (least: number) => z.int().min(least).max(MOST_DAYS);

/** Whole days within what is possible; how the members bear on each other is checked by `faultOfRetention`. */
export const retentionSchema = z.object({
	rowDays: days(LEAST_ROW_DAYS),
	rawDays: days(LEAST_ROW_DAYS),
	minuteDays: days(1),
	hourDays: days(1),
	journalDays: days(1),
	exchangeDays: days(1),
});

/** The first member that contradicts another and why, or null. */
export function faultOfRetention(retention: Retention): { field: keyof Retention; message: string } | null {
	if (retention.rawDays < retention.rowDays)
		return { field: 'rawDays', message: `must be at least the ${retention.rowDays} days that readings stay rows` };
	if (retention.hourDays < retention.minuteDays)
		return { field: 'hourDays', message: `must be at least the ${retention.minuteDays} days of the 1-minute roll-ups` };
	return null;
}
