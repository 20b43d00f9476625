import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import type { ModbusAddress } from '#lib/domain/tag-map/address.ts';
import { inHole, MAX_REGISTERS_PER_READ, planReads, widthOf, type Hole, type KeyedAddress } from './read-plan.ts';

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
const keyed = (addresses: ModbusAddress[]): KeyedAddress[] => addresses.map((address, key) => ({ key, address }));
const shape = (addresses: ModbusAddress[], holes: Hole[] = [], max?: number) =>
	planReads(keyed(addresses), holes, max).map((block) => `${block.unitId} ${block.start}+${block.count}`);

describe('planning reads', () => {
	it('asks never for more than 125 registers [Modbus AP v1.1b3 §6.3, §6.4]', () => {
		expect(shape(Array.from({ length: 126 }, (_, i) => at(i)))).toEqual(['1 0+125', '1 125+1']);
	});

	it('reads over what nobody wants where that saves a request', () => {
		expect(shape([at(0), at(100)])).toEqual(['1 0+101']);
		expect(shape([at(0), at(125)])).toEqual(['1 0+1', '1 125+1']);
	});

	it('never reads through the middle of a value', () => {
		expect(shape([at(0), at(124, { dataType: 'float32' })])).toEqual(['1 0+1', '1 124+2']);
	});

	it('keeps units and tables apart', () => {
		expect(shape([at(0), at(1, { unitId: 2 }), at(2, { table: 'holding-register' })]).sort()).toEqual([
			'1 0+1',
			'1 2+1',
			'2 1+1',
		]);
	});

	it('never reads over a known hole', () => {
		const holes: Hole[] = [{ unitId: 1, table: 'input-register', from: 5, to: 6 }];
		expect(shape([at(0), at(4), at(6), at(9)], holes)).toEqual(['1 0+5', '1 6+4']);
		expect(inHole(at(4, { dataType: 'float32' }), holes)).toBe(true);
		expect(inHole(at(4), holes)).toBe(false);
	});

	it('goes by the device’s own limit', () => {
		expect(shape([at(0), at(1), at(2)], [], 2)).toEqual(['1 0+2', '1 2+1']);
	});

	it('asks for up to 2,000 coils at once [Modbus AP v1.1b3 §6.1]', () => {
		expect(shape([at(0, { table: 'coil' }), at(1_999, { table: 'coil' }), at(2_000, { table: 'coil' })])).toEqual([
			'1 0+2000',
			'1 2000+1',
		]);
	});

	it('covers every address once, whole, within the limit, over no hole, and with as few requests as any other way', () => {
		const types = ['uint16', 'float32', 'float64'] as const;
		fc.assert(
			fc.property(
				fc.array(fc.record({ register: fc.nat(40), dataType: fc.constantFrom(...types) }), { minLength: 1, maxLength: 9 }),
				fc.option(fc.nat(40), { nil: null }),
				fc.integer({ min: 4, max: 12 }),
				(parts, hole, max) => {
					const holes: Hole[] = hole === null ? [] : [{ unitId: 1, table: 'input-register', from: hole, to: hole + 1 }];
					const addresses = parts
						.map((part) => at(part.register, { dataType: part.dataType }))
						.filter((address) => !inHole(address, holes));
					const blocks = planReads(keyed(addresses), holes, max);
					const covered = blocks.flatMap((block) => block.items.map((item) => item.key)).sort((a, b) => a - b);
					expect(covered).toEqual(addresses.map((_, key) => key));
					for (const block of blocks) {
						expect(block.count).toBeLessThanOrEqual(Math.min(max, MAX_REGISTERS_PER_READ));
						if (hole !== null) expect(block.start <= hole && hole < block.start + block.count).toBe(false);
						for (const { address } of block.items) {
							expect(address.register).toBeGreaterThanOrEqual(block.start);
							expect(address.register + widthOf(address)).toBeLessThanOrEqual(block.start + block.count);
						}
					}
					expect(blocks.length).toBe(fewest(addresses, hole, max));
				},
			),
			{ numRuns: 300 },
		);
	});
});

/** Fewest blocks by trying every way: blocks may begin only where a wanted value begins. */
function fewest(addresses: ModbusAddress[], hole: number | null, max: number): number {
	const spans = [...new Set(addresses.map((address) => `${address.register}+${widthOf(address)}`))].map(
		(text) => text.split('+').map(Number) as [number, number],
	);
	const starts = [...new Set(spans.map(([start]) => start))];
	const blocks = starts.map(
		(start) =>
			new Set(
				spans
					.filter(([s, w]) => s >= start && s + w <= start + max && (hole === null || hole < start || hole >= s + w))
					.map(([s, w]) => `${s}+${w}`),
			),
	);
	for (let count = 0; ; count += 1)
		if (
			covers(
				blocks,
				spans.map(([s, w]) => `${s}+${w}`),
				count,
			)
		)
			return count;
}

function covers(blocks: Set<string>[], left: string[], count: number): boolean {
	const [first] = left;
	if (first === undefined) return true;
	if (count === 0) return false;
	return blocks.some(
		(block) =>
			block.has(first) &&
			covers(
				blocks,
				left.filter((span) => !block.has(span)),
				count - 1,
			),
	);
}
