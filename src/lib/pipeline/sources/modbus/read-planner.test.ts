import { describe, expect, it } from 'vitest';
import type { ModbusAddress } from '#lib/domain/tag-map/address.ts';
import type { ReadBlock } from './read-plan.ts';
import { ReadPlanner } from './read-planner.ts';

const at = (register: number, extra: Partial<ModbusAddress> = {}): ModbusAddress => ({
	kind: 'modbus',
	unitId: 1,
	table: 'input-register',
	register,
	dataType: 'uint16',
	byteOrder: 'big',
	wordOrder: 'big',
	bit: null,
	...extra,
});
const planned = (addresses: ModbusAddress[], intervalMs = 1_000) => {
	const planner = new ReadPlanner(125);
	planner.want(addresses.map((address, key) => ({ key, address, intervalMs })));
	return planner;
};
const shape = (blocks: readonly ReadBlock[]) => blocks.map((block) => `${block.start}+${block.count}`);
const only = (blocks: readonly ReadBlock[]): ReadBlock => {
	if (blocks.length !== 1 || !blocks[0]) throw new Error(`${blocks.length} blocks, expected one`);
	return blocks[0];
};

describe('a refused register', () => {
	it('is left out of the rounds, and asked for a minute later', () => {
		const planner = planned([at(3), at(5), at(7)]);
		expect(planner.refused({ key: 1, address: at(5) }, 2, 1_000)).toBe(true);
		expect(shape(planner.blocksOf([1_000]))).toEqual(['3+1', '7+1']);
		expect(planner.probesOf([1_000], 60_999)).toEqual([]);
		expect(planner.probesOf([1_000], 61_000).map(({ blocks }) => shape(blocks))).toEqual([['5+1']]);
	});

	it('is news only once', () => {
		const planner = planned([at(5)]);
		expect(planner.refused({ key: 0, address: at(5) }, 2, 0)).toBe(true);
		expect(planner.refused({ key: 0, address: at(5) }, 2, 60_000)).toBe(false);
	});

	it('that is read every 5 s stays due while only faster rounds come by', () => {
		const planner = planned([at(5)], 5_000);
		planner.refused({ key: 0, address: at(5) }, 2, 0);
		expect(planner.probesOf([1_000], 61_000)).toEqual([]);
		expect(planner.probesOf([1_000, 5_000], 65_000)).toHaveLength(1);
	});

	it('that answers again is read in the rounds; the rest of a longer value stays a hole', () => {
		const float = at(5, { dataType: 'float32' });
		const planner = planned([at(3), float, at(6)]);
		planner.refused({ key: 1, address: float }, 2, 0);
		expect(shape(planner.blocksOf([1_000]))).toEqual(['3+1']);
		planner.answered({ unitId: 1, table: 'input-register', start: 6, count: 1, items: [] });
		expect(shape(planner.blocksOf([1_000]))).toEqual(['3+1', '6+1']);
		expect(planner.newestRefused).toMatchObject({ from: 5, to: 6, code: 2 });
		planner.answered({ unitId: 1, table: 'input-register', start: 5, count: 2, items: [] });
		expect(shape(planner.blocksOf([1_000]))).toEqual(['3+4']);
		expect(planner.newestRefused).toBeNull();
	});
});

describe('a refused read whose halves both answered', () => {
	it('is not read over what lies between them, until that is wanted', () => {
		const planner = planned([at(3), at(7)]);
		expect(planner.halvesAnswered(only(planner.blocksOf([1_000])), 2)).toBeNull();
		expect(shape(planner.blocksOf([1_000]))).toEqual(['3+1', '7+1']);
		// Nobody's register is refused: there is nothing to warn of.
		expect(planner.newestRefused).toBeNull();
		planner.want([3, 5, 7].map((register, key) => ({ key, address: at(register), intervalMs: 1_000 })));
		expect(shape(planner.blocksOf([1_000]))).toEqual(['3+5']);
	});

	it('is asked for in smaller reads where nothing lies between and the device refuses the number [Modbus AP v1.1b3 §7, code 3]', () => {
		const planner = planned(Array.from({ length: 100 }, (_, i) => at(i)));
		expect(planner.halvesAnswered(only(planner.blocksOf([1_000])), 3)).toBe(50);
		expect(shape(planner.blocksOf([1_000]))).toEqual(['0+50', '50+50']);
	});
});
