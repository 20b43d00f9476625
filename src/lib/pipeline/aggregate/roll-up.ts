// Pure.
import { severityOf } from '#lib/domain/quality.ts';
import { areaOf, type Point } from './part13.ts';

/** One row of a roll-up. The mean over time is `area / coveredS`. */
export interface RollUp {
	/** Begin of the bucket, ms. */
	bucket: number;
	n: number;
	goodN: number;
	min: number | null;
	max: number | null;
	/** Value times seconds. */
	area: number;
	coveredS: number;
	last: number | null;
	/** Worst StatusCode. */
	worst: number;
}

/** A value stands at most this long; a live tag stores one at least every ten minutes or as often as its sensor measures. Also in store/roll-up-sql.ts. */
export const STANDS_MS = 7_200_000;

/** The one order of readings of a tag, whatever order they came in: time, then value, none last, then quality. */
export function inOrder(a: Point, b: Point): number {
	return (
		a.at - b.at ||
		(a.value ?? Number.POSITIVE_INFINITY) - (b.value ?? Number.POSITIVE_INFINITY) ||
		(a.quality | 0) - (b.quality | 0)
	);
}

/**
 * Roll-ups of a tag's readings, one a bucket that holds any. What stood at a bucket's begin counts for it; a reading without value ends what stood.
 * Source: the mean is TimeAverage2 of OPC 10000-13, uncertain values counted. This is the definition that the store's SQL is tested against.
 */
export function rollUp(points: readonly Point[], widthMs: number, stepped: boolean): RollUp[] {
	const sorted = [...points].sort(inOrder);
	// Across a silence longer than a value stands nothing is joined: as if a reading without value lay there.
	const joined = sorted.flatMap((point, index) => {
		const next = sorted[index + 1];
		if (!next || next.at - point.at <= STANDS_MS) return [point];
		return [point, { at: Math.min(next.at - 1, bucketOf(point.at, widthMs) + widthMs), value: null, quality: NOTHING }];
	});
	const rows: RollUp[] = [];
	for (let from = 0; from < sorted.length;) {
		const first = sorted[from];
		if (!first) break;
		const bucket = bucketOf(first.at, widthMs);
		let to = from;
		while (to < sorted.length && bucketOf(sorted[to]?.at ?? 0, widthMs) === bucket) to += 1;
		const inside = sorted.slice(from, to);
		const values = inside.flatMap((point) => (point.value === null ? [] : [point.value]));
		const { area, coveredMs } = areaOf(joined, bucket, bucket + widthMs, { stepped, treatUncertainAsBad: false });
		rows.push({
			bucket,
			n: inside.length,
			goodN: inside.filter((point) => point.value !== null && severityOf(point.quality) === 'good').length,
			min: values.length > 0 ? Math.min(...values) : null,
			max: values.length > 0 ? Math.max(...values) : null,
			area: area / 1_000,
			coveredS: coveredMs / 1_000,
			last: inside.at(-1)?.value ?? null,
			worst: Math.max(...inside.map((point) => point.quality >>> 0)),
		});
		from = to;
	}
	return rows;
}

const NOTHING = 0x809b0000; // BadNoData

function bucketOf(at: number, widthMs: number): number {
	return Math.floor(at / widthMs) * widthMs;
}
