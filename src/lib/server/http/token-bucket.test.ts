import { expect, it } from 'vitest';
import { take, type Bucket } from './token-bucket.ts';

const rule = { perSecond: 100, burst: 400 };

it('lets a burst of 400 through at once and refuses the next', () => {
	let bucket: Bucket | undefined;
	for (let n = 0; n < 400; n += 1) {
		const taken = take(bucket, rule, 0);
		expect(taken.allowed).toBe(true);
		bucket = taken.bucket;
	}
	const refused = take(bucket, rule, 0);
	expect(refused.allowed).toBe(false);
	expect(refused.waitS).toBeCloseTo(0.01, 6);
});

it('gives 100 a second back, never more than the burst', () => {
	expect(take({ permits: 0, at: 0 }, rule, 1_000).bucket.permits).toBe(99);
	expect(take({ permits: 0, at: 0 }, rule, 3_600_000).bucket.permits).toBe(399);
});

it('gives nothing for a clock that went back', () => {
	expect(take({ permits: 0, at: 10_000 }, rule, 0).allowed).toBe(false);
});
