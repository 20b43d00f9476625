// Pure.
import { changedFields } from './draft.ts';
import type { MapField, MapRow } from './row.ts';

type Row = MapRow & { id: number };

/** What stands between two maps, by tag id. */
export interface MapDiff {
	added: Row[];
	removed: Row[];
	changed: { id: number; tag: string; before: Row; after: Row; fields: MapField[] }[];
	unchanged: number;
}

/** Compares two maps by tag id; a rename is a change of the field `tag`. */
export function diffMaps(before: readonly Row[], after: readonly Row[]): MapDiff {
	const old = new Map(before.map((row) => [row.id, row]));
	const diff: MapDiff = { added: [], removed: [], changed: [], unchanged: 0 };
	for (const row of after) {
		const was = old.get(row.id);
		if (!was) {
			diff.added.push(row);
			continue;
		}
		old.delete(row.id);
		const fields = changedFields(was, row);
		if (fields.length === 0) diff.unchanged += 1;
		else diff.changed.push({ id: row.id, tag: row.tag, before: was, after: row, fields });
	}
	diff.removed = [...old.values()];
	return diff;
}

/** What a publish would start, stop and change: tags that begin or cease to be read, and tags that are read otherwise than before. */
export function publishCounts(diff: MapDiff): { started: number; stopped: number; changed: number } {
	const isOn = (row: MapRow) => row.enabled !== false;
	let started = diff.added.filter(isOn).length;
	let stopped = diff.removed.filter(isOn).length;
	let changed = 0;
	for (const { before, after } of diff.changed) {
		if (isOn(before) && !isOn(after)) stopped += 1;
		else if (!isOn(before) && isOn(after)) started += 1;
		else changed += 1;
	}
	return { started, stopped, changed };
}
