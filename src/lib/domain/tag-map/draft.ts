// Pure.
import type { MapField, MapRow } from './row.ts';
import { MAP_FIELDS } from './row.ts';

/** A row as a draft shows it: the row itself, its version for careful edits, and how it differs from the published one. */
export interface DraftRow {
	id: number;
	row: MapRow;
	rowVersion: number;
	state: 'published' | 'added' | 'changed' | 'removed';
}

/** Empty text and undefined are the same as not said; only what is said is kept, so that equal rows are equal as JSON. */
export function tidyRow(row: MapRow): MapRow {
	const tidy: Record<string, unknown> = {};
	for (const field of MAP_FIELDS) {
		const value = row[field];
		if (value === null || value === undefined || value === '') continue;
		if (Array.isArray(value) && value.length === 0) continue;
		tidy[field] = typeof value === 'string' && field !== 'states' ? value.trim() : value;
		if (tidy[field] === '') delete tidy[field];
	}
	return { ...(tidy as MapRow), tag: row.tag.trim() };
}

/** Fields in which two rows differ, `id` aside. */
export function changedFields(before: MapRow, after: MapRow): MapField[] {
	return MAP_FIELDS.filter((field) => field !== 'id' && !sameValue(before[field], after[field]));
}

function sameValue(a: unknown, b: unknown): boolean {
	if (a == null || b == null) return (a ?? null) === (b ?? null);
	if (Array.isArray(a) && Array.isArray(b)) return a.length === b.length && a.every((value, i) => value === b[i]);
	return a === b;
}
