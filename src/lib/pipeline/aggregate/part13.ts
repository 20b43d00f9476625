// Pure.
import { severityOf } from '#lib/domain/quality.ts';

/** One raw value of a series; null with a bad quality, or with none. */
export interface Point {
	/** Milliseconds. */
	at: number;
	value: number | null;
	/** StatusCode. */
	quality: number;
}

/** How a series is read [OPC 10000-13, aggregate configuration]. */
export interface AggregateOptions {
	/** A value stands until the next one; else a straight line joins two. */
	stepped: boolean;
	/** Uncertain values count as bad ones. */
	treatUncertainAsBad: boolean;
}

/** `partial`: the interval reaches beyond the data. `interpolated`: no raw value lies there. */
export interface Aggregated {
	value: number | null;
	quality: number;
	interpolated?: true;
	partial?: true;
}

/** Status codes of aggregates, names as in the standard's table. */
export const GOOD = 0;
export const UNCERTAIN_DATA_SUB_NORMAL = 0x40a40000;
export const BAD_NO_DATA = 0x809b0000;

const none: Aggregated = { value: null, quality: BAD_NO_DATA };

function isUsable(point: Point, options: AggregateOptions): boolean {
	const severity = severityOf(point.quality);
	return point.value !== null && severity !== 'bad' && !(options.treatUncertainAsBad && severity === 'uncertain');
}

/**
 * Value at a moment: the raw one, or between its usable neighbours; bad ones between are passed over and make it uncertain.
 * After the last usable one it is held and uncertain.
 * Source: [OPC 10000-13, Interpolative, interpolated bounding values].
 */
export function interpolate(points: readonly Point[], at: number, options: AggregateOptions): Aggregated {
	let before: Point | undefined;
	let after: Point | undefined;
	let sawUnusable = false;
	for (const point of points) {
		if (point.at === at && isUsable(point, options)) return { value: point.value, quality: point.quality };
		if (point.at <= at) {
			if (isUsable(point, options)) {
				before = point;
				sawUnusable = false;
			} else sawUnusable = true;
			continue;
		}
		if (isUsable(point, options)) {
			after = point;
			break;
		}
		sawUnusable = true;
	}
	if (!before || before.value === null) return none;
	const areGood =
		severityOf(before.quality) === 'good' && (options.stepped || after === undefined || severityOf(after.quality) === 'good');
	if (options.stepped) {
		// What lies after does not matter to a value that is held.
		const isHeldOverBad = points.some((point) => point.at > before.at && point.at <= at && !isUsable(point, options));
		return {
			value: before.value,
			quality: areGood && !isHeldOverBad && after !== undefined ? GOOD : UNCERTAIN_DATA_SUB_NORMAL,
			interpolated: true,
		};
	}
	if (!after || after.value === null) return { value: before.value, quality: UNCERTAIN_DATA_SUB_NORMAL, interpolated: true };
	const share = (at - before.at) / (after.at - before.at);
	return {
		value: before.value + (after.value - before.value) * share,
		quality: areGood && !sawUnusable ? GOOD : UNCERTAIN_DATA_SUB_NORMAL,
		interpolated: true,
	};
}

const lastOf = (points: readonly Point[]) => points.at(-1)?.at ?? Number.NEGATIVE_INFINITY;
const firstOf = (points: readonly Point[]) => points[0]?.at ?? Number.POSITIVE_INFINITY;

function isPartial(points: readonly Point[], from: number, to: number): boolean {
	return from < firstOf(points) || to > lastOf(points);
}

/** The corner points of [from, to): interpolated at its ends, raw and usable between. */
function corners(points: readonly Point[], from: number, to: number, options: AggregateOptions): (Aggregated & { at: number })[] {
	const inner = points.filter((point) => point.at > from && point.at < to && isUsable(point, options));
	return [
		{ at: from, ...interpolate(points, from, options) },
		...inner.map((point) => ({ at: point.at, value: point.value, quality: point.quality })),
		{ at: to, ...interpolate(points, to, options) },
	];
}

/**
 * Mean of the line through the usable values over [from, to), by time.
 * Source: [OPC 10000-13, TimeAverage], interpolated bounds.
 */
export function timeAverage(points: readonly Point[], from: number, to: number, options: AggregateOptions): Aggregated {
	let area = 0;
	let covered = 0;
	let isGood = true;
	const line = corners(points, from, to, options);
	for (let i = 0; i + 1 < line.length; i += 1) {
		const [a, b] = [line[i], line[i + 1]];
		if (!a || !b || a.value === null) continue;
		const spanMs = b.at - a.at;
		const end = options.stepped || b.value === null ? a.value : b.value;
		area += ((a.value + end) / 2) * spanMs;
		covered += spanMs;
		if (severityOf(a.quality) !== 'good' || (!options.stepped && severityOf(b.quality) !== 'good')) isGood = false;
	}
	if (covered === 0) return none;
	// Data that begin within the interval are averaged over what they cover.
	const first = points.find((point) => isUsable(point, options));
	if (first && first.at > from && first.at < to && line[0]?.value === null) {
		const began = timeAverage(points, first.at, to, options);
		return { ...began, partial: true };
	}
	return {
		value: area / covered,
		quality: isGood ? GOOD : UNCERTAIN_DATA_SUB_NORMAL,
		...(isPartial(points, from, to) ? { partial: true as const } : {}),
	};
}

/**
 * Mean by time without reaching over bad values: before one the value is held, after one nothing stands until the next.
 * Source: [OPC 10000-13, TimeAverage2], simple bounds; the mean of a roll-up is this one.
 */
export function timeAverage2(points: readonly Point[], from: number, to: number, options: AggregateOptions): Aggregated {
	const { area, coveredMs } = areaOf(points, from, to, options);
	return coveredMs === 0 ? none : { value: area / coveredMs, quality: GOOD };
}

/** Area under the simple bounds over [from, to). Units: value times milliseconds, and milliseconds. */
export function areaOf(
	points: readonly Point[],
	from: number,
	to: number,
	options: AggregateOptions,
): { area: number; coveredMs: number } {
	let area = 0;
	let coveredMs = 0;
	points.forEach((point, index) => {
		const next = points[index + 1];
		const [begin, end] = [Math.max(point.at, from), Math.min(next?.at ?? to, to)];
		if (end <= begin || point.value === null || !isUsable(point, options)) return;
		const valueAt = (at: number) => {
			if (options.stepped || !next || next.value === null || !isUsable(next, options)) return point.value ?? 0;
			return (point.value ?? 0) + ((next.value - (point.value ?? 0)) * (at - point.at)) / (next.at - point.at);
		};
		area += ((valueAt(begin) + valueAt(end)) / 2) * (end - begin);
		coveredMs += end - begin;
	});
	return { area, coveredMs };
}

function rawGood(points: readonly Point[], from: number, to: number): number[] {
	return points.flatMap((point) =>
		point.at >= from && point.at < to && point.value !== null && severityOf(point.quality) === 'good' ? [point.value] : [],
	);
}

/** Mean of the good raw values. Source: [OPC 10000-13, Average]. */
export function average(points: readonly Point[], from: number, to: number): Aggregated {
	const values = rawGood(points, from, to);
	return values.length === 0 ? none : { value: values.reduce((sum, value) => sum + value, 0) / values.length, quality: GOOD };
}

/** Least and greatest good raw value. Source: [OPC 10000-13, Minimum, Maximum]. */
export function extremes(points: readonly Point[], from: number, to: number): { min: Aggregated; max: Aggregated } {
	const values = rawGood(points, from, to);
	if (values.length === 0) return { min: none, max: none };
	const partial = isPartial(points, from, to) ? { partial: true as const } : {};
	return {
		min: { value: Math.min(...values), quality: GOOD, ...partial },
		max: { value: Math.max(...values), quality: GOOD, ...partial },
	};
}

/** Number of good raw values; bad where only bad ones lie in it, uncertain where none but uncertain do. Source: [OPC 10000-13, Count]. */
export function countGood(points: readonly Point[], from: number, to: number): Aggregated {
	const inside = points.filter((point) => point.at >= from && point.at < to);
	const n = rawGood(points, from, to).length;
	if (n > 0) return { value: n, quality: GOOD };
	if (inside.length > 0 && inside.every((point) => severityOf(point.quality) === 'bad')) return none;
	return { value: 0, quality: inside.length > 0 ? UNCERTAIN_DATA_SUB_NORMAL : GOOD };
}

/**
 * Milliseconds of [from, to) in which the value was good, bad and neither. A raw value gives its quality to the time until the next one; the
 * bound at the begin is good only between two good ones, bad after a bad one.
 * Source: [OPC 10000-13, DurationGood, DurationBad, PercentGood, PercentBad].
 */
export function durations(
	points: readonly Point[],
	from: number,
	to: number,
): { goodMs: number; badMs: number; uncertainMs: number } {
	const total = { good: 0, bad: 0, uncertain: 0 };
	const inner = points.filter((point) => point.at > from && point.at < to);
	const before = points.findLast((point) => point.at <= from);
	const after = points.find((point) => point.at > from);
	const stateOf = (point: Point) => (point.value === null ? 'bad' : severityOf(point.quality));
	let state: 'good' | 'bad' | 'uncertain' = 'bad';
	if (before) {
		state = stateOf(before);
		// Between a good value and one that is not, the bound is uncertain.
		if (before.at < from && state === 'good' && after && stateOf(after) !== 'good') state = 'uncertain';
	}
	let since = from;
	for (const point of inner) {
		total[state] += point.at - since;
		since = point.at;
		state = stateOf(point);
	}
	total[state] += to - since;
	return { goodMs: total.good, badMs: total.bad, uncertainMs: total.uncertain };
}

/** Share of [from, to) in which the value was good, 0 to 100. */
export function percentGood(points: readonly Point[], from: number, to: number): number {
	return (durations(points, from, to).goodMs / (to - from)) * 100;
}

/** Sample deviation and variance of the good raw values; 0 for one alone. Source: [OPC 10000-13, StandardDeviationSample, VarianceSample]. */
export function spread(points: readonly Point[], from: number, to: number): { deviation: number; variance: number } {
	const values = rawGood(points, from, to);
	if (values.length < 2) return { deviation: 0, variance: 0 };
	const mean = values.reduce((sum, value) => sum + value, 0) / values.length;
	const variance = values.reduce((sum, value) => sum + (value - mean) ** 2, 0) / (values.length - 1);
	return { deviation: Math.sqrt(variance), variance };
}

/** The worst StatusCode among the raw values; null without one. Source: [OPC 10000-13, WorstQuality]. */
export function worstQuality(points: readonly Point[], from: number, to: number): number | null {
	const codes = points.flatMap((point) => (point.at >= from && point.at < to ? [point.quality >>> 0] : []));
	return codes.length === 0 ? null : Math.max(...codes);
}
