import { expect, test } from 'vitest';
import type { TrendItem } from '../live/shapes.ts';
import { bucketWords, limitNote, trendColumns, trendCsv } from './trend-data.ts';

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

test('where a source tells only changes, silence after a good reading means that the value stands: level until the next, no gap', () => {
	const columns = trendColumns([item(0, 1), item(5, 3)], 0, { bucketMs: 60_000, isByChange: true });
	expect(columns.mean).toEqual([1, 1, 3]);
	expect(columns.at[1]! - columns.at[0]!).toBe(240);
	expect(columns.bands).toEqual([]);
	const bad = { ...item(0, 1), worst: 0x80310000 };
	expect(trendColumns([bad, item(5, 3)], 0, { bucketMs: 60_000, isByChange: true }).mean).toEqual([1, null, 3]);
});

test('what is shown is saved as CSV, a comma in a unit quoted [RFC 4180]', () => {
	const rows = trendCsv([item(0, 1.5)], 'FAN.DE.V', 'a,b').split('\r\n');
	expect(rows).toEqual([
		'tag,from,min,max,mean,readings,unit,worst_quality',
		'FAN.DE.V,2026-01-01T00:00:00.000Z,1.5,1.5,1.5,1,"a,b",',
		'',
	]);
});

test('the margin shows a limit’s note up to its first comma', () => {
	expect(limitNote('zone C/D, ISO 20816-3 group 1, rigid')).toBe('zone C/D');
	expect(limitNote(null)).toBe('');
});
