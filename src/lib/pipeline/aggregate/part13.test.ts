import { describe, expect, it } from 'vitest';
import {
	average,
	BAD_NO_DATA,
	countGood,
	durations,
	extremes,
	GOOD,
	interpolate,
	percentGood,
	spread,
	timeAverage,
	timeAverage2,
	UNCERTAIN_DATA_SUB_NORMAL,
	worstQuality,
	type Point,
} from './part13.ts';

// Expected numbers: OPC Foundation, UA-Nodeset, Schema/AggregateExamples.csv ("Test Data for Part 13 Spec"), quoted by row. The raw series are
// those of OPC 10000-13 Annex A, from memory; the quoted results of each were worked through by hand against them.
const BAD = 0x80000000;
const UNCERTAIN = 0x40000000;
const s = (text: string) => {
	const [minutes = 0, seconds = 0] = text.split(':').map(Number);
	return (minutes * 60 + seconds) * 1_000;
};
const series = (text: string): Point[] =>
	text.split(',').map((part) => {
		const [time = '', value = '', quality = 'G'] = part.trim().split(' ');
		return {
			at: s(time),
			value: quality === 'B' ? null : Number(value),
			quality: quality === 'B' ? BAD : quality === 'U' ? UNCERTAIN : GOOD,
		};
	});

/** Historian 1: sloped, uncertain is not bad. */
const h1 = series('0:10 10, 0:20 20, 0:30 30, 0:40 - B, 0:50 50, 1:00 60, 1:10 70 U, 1:20 80, 1:30 90');
const H1 = { stepped: false, treatUncertainAsBad: false };
/** Historian 2: irregular, sloped, uncertain is bad. Historian 3: the same, stepped. */
const h2 = series(
	'0:02 10, 0:25 20, 0:28 25, 0:39 30, 0:42 - B, 0:48 40, 0:52 50, 1:12 60, 1:17 70 U, 1:23 70, 1:26 80, 1:30 90',
);
const H2 = { stepped: false, treatUncertainAsBad: true };
const H3 = { stepped: true, treatUncertainAsBad: true };

const SUB = UNCERTAIN_DATA_SUB_NORMAL;
const STATUS = { Good: GOOD, Uncertain: UNCERTAIN, Bad: BAD };

describe('interpolation follows OPC UA Part 13 (AggregateExamples.csv)', () => {
	it.each([
		['0:10', 10, GOOD, undefined],
		['0:15', 15, GOOD, true],
		['0:35', 35, SUB, true],
		['0:45', 45, SUB, true],
		['1:05', 65, SUB, true],
		['1:10', 70, UNCERTAIN, undefined],
		['1:35', 90, SUB, true],
	] as const)('historian 1 at %s is %d', (time, value, quality, interpolated) => {
		expect(interpolate(h1, s(time), H1)).toEqual({ value, quality, ...(interpolated ? { interpolated } : {}) });
	});

	it.each([
		['0:05', 11.304, GOOD],
		['0:10', 13.478, GOOD],
		['0:30', 25.909, GOOD],
		['0:40', 31.111, SUB],
	] as const)('historian 2 at %s is %d', (time, value, quality) => {
		const found = interpolate(h2, s(time), H2);
		expect(found.value).toBeCloseTo(value, 3);
		expect(found.quality).toBe(quality);
	});

	it.each([
		['0:05', 10, GOOD],
		['0:30', 25, GOOD],
		['0:45', 30, SUB],
	] as const)('historian 3, stepped, at %s is %d', (time, value, quality) => {
		expect(interpolate(h2, s(time), H3)).toMatchObject({ value, quality });
	});

	it('before the first value there is no data', () => {
		expect(interpolate(h1, s('0:05'), H1)).toEqual({ value: null, quality: BAD_NO_DATA });
	});
});

describe('time averages follow OPC UA Part 13 (AggregateExamples.csv)', () => {
	const at5 = (time: string) => [s(time), s(time) + 5_000] as const;

	it.each([
		['0:10', 12.5, GOOD, undefined],
		['0:30', 32.5, SUB, undefined],
		['0:45', 47.5, SUB, undefined],
		['0:50', 52.5, GOOD, undefined],
		['1:30', 90, SUB, true],
	] as const)('TimeAverage of historian 1 from %s over 5 s is %d', (time, value, quality, partial) => {
		expect(timeAverage(h1, ...at5(time), H1)).toEqual({ value, quality, ...(partial ? { partial } : {}) });
	});

	it('TimeAverage of historian 2, ten intervals of 5 s from 0:00', () => {
		const expected = [10.652, 12.391, 14.565, 16.739, 18.913, 23.682, 27.045, 29.384, 33.889, 40];
		expected.forEach((value, index) => {
			expect(timeAverage(h2, index * 5_000, (index + 1) * 5_000, H2).value).toBeCloseTo(value, 3);
		});
	});

	it('a plain mean of the samples fails nine of those ten: the check can fail', () => {
		const expected = [10.652, 12.391, 14.565, 16.739, 18.913, 23.682, 27.045, 29.384, 33.889, 40];
		const plain = expected.map((_, index) => average(h2, index * 5_000, (index + 1) * 5_000).value);
		expect(plain.filter((value, index) => value !== null && Math.abs(value - (expected[index] ?? 0)) < 0.001)).toHaveLength(1);
	});

	it('TimeAverage2 of historian 1: held before a bad value, nothing after it', () => {
		expect(timeAverage2(h1, ...at5('0:30'), H1).value).toBe(30);
		expect(timeAverage2(h1, ...at5('0:40'), H1)).toEqual({ value: null, quality: BAD_NO_DATA });
		expect(timeAverage2(h1, ...at5('0:50'), H1)).toEqual({ value: 52.5, quality: GOOD });
	});

	it.each([
		['0:10', 10],
		['0:15', null],
		['1:10', null],
	] as const)('Average of historian 1 from %s leaves uncertain samples out: %s', (time, value) => {
		expect(average(h1, ...at5(time))).toEqual({ value, quality: value === null ? BAD_NO_DATA : GOOD });
	});
});

describe('counts and shares follow OPC UA Part 13 (AggregateExamples.csv), historian 1 over 16 s', () => {
	const at16 = (index: number) => [index * 16_000, (index + 1) * 16_000] as const;

	it.each([
		[0, 10, 10, true],
		[1, 20, 30, undefined],
		[2, null, null, undefined],
		[3, 50, 60, undefined],
		[5, 80, 90, true],
	] as const)('Minimum and Maximum of interval %i are %s and %s', (index, least, most, partial) => {
		const { min, max } = extremes(h1, ...at16(index));
		const extra = partial ? { partial } : {};
		const quality = least === null ? BAD_NO_DATA : GOOD;
		expect([min, max]).toEqual([
			{ value: least, quality, ...extra },
			{ value: most, quality, ...extra },
		]);
	});

	it('Count', () => {
		expect([0, 1, 2, 3, 4, 5].map((index) => countGood(h1, ...at16(index)))).toEqual([
			{ value: 1, quality: GOOD },
			{ value: 2, quality: GOOD },
			{ value: null, quality: BAD_NO_DATA },
			{ value: 2, quality: GOOD },
			{ value: 0, quality: SUB },
			{ value: 2, quality: GOOD },
		]);
	});

	it('PercentGood and PercentBad', () => {
		const found = [0, 1, 2, 3, 4, 5].map((index) => [
			percentGood(h1, ...at16(index)),
			(durations(h1, ...at16(index)).badMs / 16_000) * 100,
		]);
		expect(found).toEqual([
			[37.5, 62.5],
			[100, 0],
			[0, 50],
			[87.5, 12.5],
			[0, 0],
			[100, 0],
		]);
	});

	it('DurationGood and DurationBad', () => {
		const found = [0, 1, 2, 3].map((index) => durations(h1, ...at16(index)));
		expect(found.map(({ goodMs, badMs }) => [goodMs, badMs])).toEqual([
			[6_000, 10_000],
			[16_000, 0],
			[0, 8_000],
			[14_000, 2_000],
		]);
	});

	it('WorstQuality', () => {
		expect([0, 1, 2, 3, 4, 5].map((index) => worstQuality(h1, ...at16(index)))).toEqual(
			(['Good', 'Good', 'Bad', 'Good', 'Uncertain', 'Good'] as const).map((word) => STATUS[word]),
		);
	});

	it('StandardDeviationSample and VarianceSample over 20 s', () => {
		const found = [0, 1, 2, 3, 4].map((index) => spread(h1, index * 20_000, (index + 1) * 20_000));
		expect(found.map(({ variance }) => variance)).toEqual([0, 50, 0, 0, 50]);
		expect(found[1]?.deviation).toBeCloseTo(7.071, 3);
	});
});
