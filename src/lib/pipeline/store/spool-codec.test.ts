import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { packForSpool, unpackFromSpool } from './spool-codec.ts';
import type { StoredReading } from './write-batch.ts';

const time = fc.integer({ min: 0, max: 4_102_444_800_000 });
const reading = fc.record({
	siteId: fc.integer({ min: 1, max: 2_147_483_647 }),
	tagId: fc.integer({ min: 1, max: 2_147_483_647 }),
	at: time,
	value: fc.option(fc.double({ noNaN: true })),
	quality: fc.integer({ min: 0, max: 0xffffffff }),
	timeFrom: fc.constantFrom('source', 'hub'),
	receivedAt: time,
	sourceAt: fc.option(time),
	reason: fc.option(fc.constantFrom('sentinel', 'frozen')),
	raw: fc.oneof(fc.constant(null), fc.double(), fc.boolean(), fc.string(), fc.bigInt({ min: -(2n ** 63n), max: 2n ** 64n - 1n })),
	rawKept: fc.option(fc.string()),
	wire: fc.option(fc.string()),
	revision: fc.integer({ min: 0, max: 2_147_483_647 }),
}) as fc.Arbitrary<StoredReading>;

describe('a row of the spool', () => {
	it('gives back what was packed, in its order, to the last bit', () => {
		fc.assert(
			fc.property(fc.array(reading, { maxLength: 50 }), (readings) => {
				const found = unpackFromSpool(packForSpool({ readings, testReadings: [] })).readings;
				expect(found).toHaveLength(readings.length);
				readings.forEach((one, index) => {
					expect(found[index]).toEqual(one);
					// toEqual takes -0 for 0.
					expect(Object.is(found[index]?.value, one.value)).toBe(true);
				});
			}),
		);
	});

	it('that is spoiled or of another version is refused, never read as something else', () => {
		const packed = packForSpool({ readings: [], testReadings: [] });
		expect(() => unpackFromSpool(Buffer.from([9, ...packed.subarray(1)]))).toThrow('version 9');
		const spoiled = Buffer.from(packed);
		spoiled[spoiled.length - 3] = (spoiled[spoiled.length - 3] ?? 0) ^ 0xff;
		expect(() => unpackFromSpool(spoiled)).toThrow();
	});
});
