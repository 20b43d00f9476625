import { describe, expect, it } from 'vitest';
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import { mergeGone, mergeRemoval, mergeRow } from './merge-drafts.ts';

const base = { id: 7, tag: 'PUMP.V', unit: 'mm/s', description: 'old', scale: 1 } as MapRow;

describe('a row that two people changed', () => {
	it.each([
		['only theirs', {}, { unit: 'in/s' }, { unit: 'in/s' }, []],
		['only yours', { unit: 'in/s' }, {}, { unit: 'in/s' }, []],
		['different cells', { description: 'mine' }, { scale: 2 }, { description: 'mine', scale: 2 }, []],
		['the same cell alike', { scale: 3 }, { scale: 3 }, { scale: 3 }, []],
		['the same cell differently: theirs stands, yours is told', { scale: 3 }, { scale: 4 }, { scale: 4 }, [['scale', 3, 4]]],
		[
			'a cell emptied here and filled there',
			{ description: null },
			{ description: 'new' },
			{ description: 'new' },
			[['description', null, 'new']],
		],
		['a name changed here, a unit there', { tag: 'PUMP.VEL' }, { unit: 'in/s' }, { tag: 'PUMP.VEL', unit: 'in/s' }, []],
	] as const)('%s', (_, yours, theirs, expected, conflicts) => {
		const merged = mergeRow(base, { ...base, ...yours } as MapRow, { ...base, ...theirs } as MapRow);
		expect(merged.row).toEqual({ ...base, ...expected });
		expect(merged.conflicts.map((one) => [one.field, one.yours, one.theirs])).toEqual(conflicts);
	});

	it('stays away when only you took it away, and comes back to be asked about when they changed it', () => {
		expect(mergeRemoval(base, { ...base })).toBeNull();
		expect(mergeRemoval(base, { ...base, scale: 2 })).toMatchObject({ id: 7, yours: 'removed', theirs: 'changed' });
	});

	it('that they took away is asked about with what you had', () => {
		expect(mergeGone(base, { ...base, scale: 2 })).toMatchObject({ yours: 'changed', theirs: 'removed', row: { scale: 2 } });
	});
});
