import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import type { Point } from './part13.ts';
import { rollUp } from './roll-up.ts';

const MINUTE = 60_000;
const good = (second: number, value: number): Point => ({ at: second * 1_000, value, quality: 0 });
const bad = (second: number): Point => ({ at: second * 1_000, value: null, quality: 0x80310000 });

describe('a roll-up', () => {
	it('weighs each value by the time that it stood, what stood at the begin included (by hand)', () => {
		// 10 stands from -30 s; 20 from 15 s; 40 from 45 s: 10 * 15 + 20 * 30 + 40 * 15 = 1350 over 60 s.
		const rows = rollUp([good(-30, 10), good(15, 20), good(45, 40)], MINUTE, true);
		expect(rows.at(-1)).toEqual({ bucket: 0, n: 2, goodN: 2, min: 20, max: 40, area: 1_350, coveredS: 60, last: 40, worst: 0 });
	});

	it('of a polled value joins readings by a straight line (by hand)', () => {
		// From 10 at -30 s to 40 at 30 s: 25 at 0 s; (25 + 40) / 2 * 30 = 975; then 40 held for 30 s, nothing after it: 1200.
		expect(rollUp([good(-30, 10), good(30, 40)], MINUTE, false).at(-1)).toMatchObject({ area: 2_175, coveredS: 60 });
		// And with 70 at 90 s the line goes on to 55 at 60 s: 975 + (40 + 55) / 2 * 30 = 2400.
		expect(rollUp([good(-30, 10), good(30, 40), good(90, 70)], MINUTE, false)[1]).toMatchObject({ area: 2_400, coveredS: 60 });
	});

	it('covers nothing after a reading without value until the next one', () => {
		expect(rollUp([good(0, 10), bad(20), good(50, 30)], MINUTE, true)).toEqual([
			{ bucket: 0, n: 3, goodN: 2, min: 10, max: 30, area: 500, coveredS: 30, last: 30, worst: 0x80310000 },
		]);
	});

	it('joins nothing over two hours without a word', () => {
		const rows = rollUp([good(0, 10), good(7_201, 30)], MINUTE, false);
		expect(rows.map(({ area, coveredS }) => [area, coveredS])).toEqual([
			[600, 60],
			[30 * 59, 59],
		]);
	});

	it('is the same whatever order readings come in, and doubles are not there to change it', () => {
		const point = fc.record({
			at: fc.integer({ min: 0, max: 600_000 }),
			value: fc.option(fc.integer({ min: -100, max: 100 })),
			quality: fc.constantFrom(0, 0x40000000, 0x80000000),
		});
		const series = fc.uniqueArray(point, { selector: (one) => `${one.at} ${one.value} ${one.quality}`, maxLength: 40 });
		fc.assert(
			fc.property(series, fc.boolean(), fc.integer(), (points, stepped, seed) => {
				const shuffled = [...points].sort((a, b) => ((a.at * 31 + seed) % 97) - ((b.at * 31 + seed) % 97));
				expect(rollUp(shuffled, MINUTE, stepped)).toEqual(rollUp(points, MINUTE, stepped));
			}),
		);
	});

	it('never covers more than its width, and its mean lies between lowest and highest that stood', () => {
		fc.assert(
			fc.property(
				fc.array(fc.tuple(fc.integer({ min: 0, max: 600 }), fc.integer({ min: -50, max: 50 })), { minLength: 1, maxLength: 40 }),
				fc.boolean(),
				(pairs, stepped) => {
					for (const row of rollUp(
						pairs.map(([second, value]) => good(second, value)),
						MINUTE,
						stepped,
					)) {
						expect(row.coveredS).toBeLessThanOrEqual(60);
						if (row.coveredS > 0) expect(Math.abs(row.area / row.coveredS)).toBeLessThanOrEqual(50 + 1e-9);
					}
				},
			),
		);
	});
});
