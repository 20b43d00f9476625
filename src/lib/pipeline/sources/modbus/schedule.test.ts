import { describe, expect, it } from 'vitest';
import { afterRound, startRounds } from './schedule.ts';

describe('rounds of an interval', () => {
	it('stay in phase however long a round took', () => {
		expect(afterRound(startRounds(1_000, 0), 40).nextAt).toBe(1_000);
		expect(afterRound({ intervalMs: 1_000, nextAt: 1_000, skipped: 0 }, 1_900).nextAt).toBe(2_000);
	});

	it('skip and count what could not be kept, instead of catching up', () => {
		expect(afterRound(startRounds(1_000, 0), 3_200)).toEqual({ intervalMs: 1_000, nextAt: 4_000, skipped: 3 });
	});
});
