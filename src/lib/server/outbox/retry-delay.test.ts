import { expect, it } from 'vitest';
import { retryDelayS } from './retry-delay.ts';

// 10 · 2^(n-1), capped at 3600, by hand calculation.
it.each([
	[1, 10],
	[2, 20],
	[5, 160],
	[9, 2_560],
	[10, 3_600],
	[40, 3_600],
])('after %i failed tries the longest delay is %i s', (attempts, seconds) => {
	expect(retryDelayS(attempts, 1)).toBe(seconds);
	expect(retryDelayS(attempts, 0)).toBe(seconds * 0.75);
});
