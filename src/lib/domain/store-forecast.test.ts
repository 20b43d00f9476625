import { describe, expect, it } from 'vitest';
import { forecastStore } from './store-forecast.ts';

describe('the forecast of the store', () => {
	const rows = { bytes: 300, bytesPerDay: 100, keepDays: 7, heldDays: 3 };
	const blocks = { bytes: 0, bytesPerDay: 10, keepDays: 393, heldDays: 0, waitDays: 4 };

	it('ends at the size where retention takes as much as comes [by hand]', () => {
		// Rows: 4 more days of 100. Blocks: 393 days of 10, beginning in 4 days. 300 + 400 + 3930 + 50 beside them.
		expect(forecastStore([rows, blocks], 50, null)).toEqual({
			growthPerDay: 100,
			steadyBytes: 4_680,
			steadyInDays: 397,
			fullInDays: null,
		});
	});

	it('names the day when the free bytes are used up, and none where they last [by hand]', () => {
		// 400 by day 4, then 10 a day: 1000 are passed on the day after 60 days of blocks, day 65.
		expect(forecastStore([rows, blocks], 50, 1_000).fullInDays).toBe(65);
		expect(forecastStore([rows, blocks], 50, 250).fullInDays).toBe(3);
		expect(forecastStore([rows, blocks], 50, 4_330).fullInDays).toBeNull();
		expect(forecastStore([rows, blocks], 50, 4_329).fullInDays).toBe(397);
	});

	it('does not grow where everything reaches back as far as it is kept', () => {
		expect(forecastStore([{ bytes: 700, bytesPerDay: 100, keepDays: 7, heldDays: 8 }], 0, 1)).toEqual({
			growthPerDay: 0,
			steadyBytes: 700,
			steadyInDays: 0,
			fullInDays: null,
		});
	});
});
