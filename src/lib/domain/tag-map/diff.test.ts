import { describe, expect, it } from 'vitest';
import { diffMaps, publishCounts } from './diff.ts';
import type { MapRow } from './row.ts';

const row = (id: number, extra: Partial<MapRow> = {}): MapRow & { id: number } => ({ tag: `T${id}`, unit: 'mm/s', ...extra, id });

describe('the difference between two maps', () => {
	it('goes by the tag’s id, so that a rename is a change and not a new tag', () => {
		const diff = diffMaps([row(1), row(2), row(3)], [row(1, { tag: 'NEW' }), row(3, { unit: 'mm/s' }), row(4)]);
		expect(diff.added.map((one) => one.id)).toEqual([4]);
		expect(diff.removed.map((one) => one.id)).toEqual([2]);
		expect(diff.changed).toMatchObject([{ id: 1, fields: ['tag'] }]);
		expect(diff.unchanged).toBe(1);
	});

	it('holds a missing member and null for equal, and lists by their members', () => {
		expect(
			diffMaps([row(1, { deadband: null, sentinels: [1, '0x8000'] })], [row(1, { sentinels: [1, '0x8000'] })]).changed,
		).toEqual([]);
		expect(diffMaps([row(1, { sentinels: [1] })], [row(1, { sentinels: [2] })]).changed).toHaveLength(1);
	});

	it('counts a tag that is switched off as stopped and one switched on as started', () => {
		const diff = diffMaps(
			[row(1), row(2, { enabled: false }), row(3)],
			[row(1, { enabled: false }), row(2, { enabled: true }), row(3, { scale: 2 }), row(4)],
		);
		expect(publishCounts(diff)).toEqual({ started: 2, stopped: 1, changed: 1 });
	});
});
