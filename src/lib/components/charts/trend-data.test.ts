import { expect, test } from 'vitest';
import type { TrendItem } from '../live/shapes.ts';
import { bucketWords, trendColumns } from './trend-data.ts';

const item = (minute: number, mean: number | null): TrendItem => ({
	at: new Date(Date.UTC(2026, 0, 1, 0, minute)).toISOString(),
	min: mean,
	max: mean,
	mean,
	n: 1,
	worst: null,
});

test('a missing bucket leaves a gap in the line and a band under the axis', () => {
	const columns = trendColumns([item(0, 1), item(1, 2), item(5, 3)]);
	expect(columns.mean).toEqual([1, 2, null, 3]);
	const start = Date.UTC(2026, 0, 1) / 1_000;
	expect(columns.bands).toEqual([{ from: start + 120, to: start + 300, kind: 'gap' }]);
	expect(columns.bucketMs).toBe(60_000);
});

test('readings that come slower than the bucket is wide are no gap', () => {
	const columns = trendColumns([item(0, 1), item(1, 2), item(5, 3)], 240_000);
	expect(columns.mean).toEqual([1, 2, 3]);
});

test('a bucket without a good value is a bad stretch, joined with its neighbour', () => {
	const columns = trendColumns([item(0, 1), item(1, null), item(2, null), item(3, 4)]);
	const start = Date.UTC(2026, 0, 1) / 1_000;
	expect(columns.bands).toEqual([{ from: start + 60, to: start + 180, kind: 'bad' }]);
});

test('the bucket is written out', () => {
	expect(bucketWords(1_800_000)).toBe('30 minutes');
	expect(bucketWords(3_600_000)).toBe('1 hour');
});
