import { expect, it } from 'vitest';
import type { ModbusAddress } from '#lib/domain/tag-map/address.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { otherDecodings } from './other-decodings.ts';

const plan = (dataType: ModbusAddress['dataType'], wordOrder: 'big' | 'little' = 'big', scale = 1) =>
	({
		scale,
		offset: 0,
		conversion: { factor: 1, offset: 0 },
		address: {
			kind: 'modbus',
			unitId: 4,
			table: 'input-register',
			register: 100,
			dataType,
			byteOrder: 'big',
			wordOrder,
			bit: null,
		},
	}) as unknown as TagPlan;

it('a negative int16 read as unsigned is among them: FF 9C is -100 or 65,436 [two’s complement, by hand]', () => {
	const found = otherDecodings('FF 9C', -100, plan('int16', 'big', 0.1));
	expect(found.find((one) => one.words === 'uint16')).toMatchObject({ raw: 65_436 });
	expect(found.find((one) => one.words === 'uint16')?.scaled).toBeCloseTo(6_543.6, 6);
	expect(found.find((one) => one.words === 'bytes swapped')).toMatchObject({ raw: -25_345 });
});

it('bytes that were not kept are rebuilt: 25.125 is 41 C9 00 00 [IEEE 754], 0000 41C9 with the low word first', () => {
	const words = (found: { words: string; raw: number }[], what: string) => found.find((one) => one.words === what)?.raw;
	for (const found of [otherDecodings(null, 25.125, plan('float32')), otherDecodings('41C90000', 25.125, plan('float32'))]) {
		expect(words(found, 'uint32')).toBe(0x41c90000);
		expect(words(found, 'uint32, low word first')).toBe(0x41c9);
		expect(words(found, 'uint16, first register only')).toBe(0x41c9);
	}
	expect(words(otherDecodings(null, 25.125, plan('float32', 'little')), 'uint32')).toBe(0x41c90000);
	expect(words(otherDecodings(null, 25.125, plan('float32', 'little')), 'uint16, first register only')).toBe(0);
});

it('a source without registers gives none', () => {
	expect(otherDecodings('25.1', 25.1, { address: { kind: 'mqtt' } } as unknown as TagPlan)).toEqual([]);
});
