// Pure.
import type { MapField, MapRow } from '#lib/domain/tag-map/row.ts';

/** A cell that two people changed to different values, or a row that one changed and the other took away. */
export interface DraftConflict {
	/** Id of the row, for life. */
	id: number;
	tag: string;
	/** Null where the whole row is meant. */
	field: MapField | null;
	yours: MapRow[MapField] | 'changed' | 'removed';
	theirs: MapRow[MapField] | 'changed' | 'removed';
	/** Your row as it was, for what was taken away there. */
	row: MapRow;
}

const isSame = (a: unknown, b: unknown) => JSON.stringify(a ?? null) === JSON.stringify(b ?? null);

/**
 * One row that both may have changed since `base`: what only you changed stays yours, what only they changed is theirs. Where both differ theirs
 * stands, so that nothing of theirs is overwritten, and yours is told to be chosen.
 */
export function mergeRow(base: MapRow, yours: MapRow, theirs: MapRow): { row: MapRow; conflicts: DraftConflict[] } {
	const row: Record<string, unknown> = { ...theirs };
	const conflicts: DraftConflict[] = [];
	const fields = new Set([...Object.keys(base), ...Object.keys(yours), ...Object.keys(theirs)]) as Set<MapField>;
	for (const field of fields) {
		if (isSame(yours[field], base[field])) continue;
		if (isSame(theirs[field], base[field]) || isSame(yours[field], theirs[field])) row[field] = yours[field];
		else conflicts.push({ id: base.id ?? 0, tag: theirs.tag, field, yours: yours[field], theirs: theirs[field], row: yours });
	}
	return { row: row as MapRow, conflicts };
}

/** A row that you took away and they may have changed: it stays away unless they did. */
export function mergeRemoval(base: MapRow, theirs: MapRow): DraftConflict | null {
	return isSame(base, theirs)
		? null
		: { id: base.id ?? 0, tag: theirs.tag, field: null, yours: 'removed', theirs: 'changed', row: base };
}

/** A row that you changed and they took away. */
export function mergeGone(base: MapRow, yours: MapRow): DraftConflict {
	return { id: base.id ?? 0, tag: base.tag, field: null, yours: 'changed', theirs: 'removed', row: yours };
}
