// Pure.
import type { TrendItem } from '../live/shapes.ts';

/** Columns for drawing: seconds, lowest, highest, mean; a missing bucket is a null, so that no line joins over it. */
export interface TrendColumns {
	at: number[];
	min: (number | null)[];
	max: (number | null)[];
	mean: (number | null)[];
	/** Stretches without a good value, in seconds, with what was wrong: nothing came, or it was bad or uncertain. */
	bands: { from: number; to: number; kind: 'gap' | 'bad' | 'uncertain' }[];
	/** Width of a bucket in milliseconds; 0 with fewer than two. */
	bucketMs: number;
}

function severityOf(worst: TrendItem['worst']): 'good' | 'uncertain' | 'bad' {
	if (worst === null) return 'good';
	if (typeof worst === 'object') return worst.severity;
	const severity = (worst >>> 30) & 3;
	return severity === 0 ? 'good' : severity === 1 ? 'uncertain' : 'bad';
}

/** Smallest distance between neighbours: the bucket, where none is missing. */
function bucketOf(items: readonly TrendItem[]): number {
	let smallest = Infinity;
	for (let i = 1; i < items.length; i += 1) {
		const step = Date.parse(items[i]!.at) - Date.parse(items[i - 1]!.at);
		if (step > 0 && step < smallest) smallest = step;
	}
	return Number.isFinite(smallest) ? smallest : 0;
}

/**
 * Lays a trend out for drawing. `expectedMs` is how far apart raw points may be before it is a gap. Where a source tells only changes
 * (`isByChange`), silence means that the value stands: it is a gap only after a bad reading, and the line goes on level until the next.
 */
export function trendColumns(
	items: readonly TrendItem[],
	expectedMs = 0,
	given: { bucketMs?: number; isByChange?: boolean } = {},
): TrendColumns {
	const bucketMs = given.bucketMs ?? bucketOf(items);
	const tooFar = Math.max(bucketMs * 1.9, expectedMs * 3);
	const columns: TrendColumns = { at: [], min: [], max: [], mean: [], bands: [], bucketMs };
	const band = (from: number, to: number, kind: 'gap' | 'bad' | 'uncertain') => {
		const last = columns.bands[columns.bands.length - 1];
		if (last && last.kind === kind && from <= last.to + 0.001) last.to = to;
		else columns.bands.push({ from, to, kind });
	};
	const push = (ms: number, min: number | null, max: number | null, mean: number | null) => {
		columns.at.push(ms / 1_000);
		columns.min.push(min);
		columns.max.push(max);
		columns.mean.push(mean);
	};
	items.forEach((item, index) => {
		const ms = Date.parse(item.at);
		const before = items[index - 1];
		const beforeMs = before ? Date.parse(before.at) : ms;
		if (before && tooFar > 0 && ms - beforeMs > tooFar) {
			const isStanding = given.isByChange === true && before.mean !== null && severityOf(before.worst) !== 'bad';
			if (isStanding) push(ms - Math.max(1, bucketMs), before.mean, before.mean, before.mean);
			else {
				push(beforeMs + Math.max(1, bucketMs), null, null, null);
				band((beforeMs + bucketMs) / 1_000, ms / 1_000, 'gap');
			}
		}
		push(ms, item.min, item.max, item.mean);
		const severity = item.mean === null ? 'bad' : severityOf(item.worst);
		if (severity !== 'good') band(ms / 1_000, (ms + Math.max(bucketMs, 1_000)) / 1_000, severity);
	});
	return columns;
}

/** A bucket's width in words: `30 minutes`. */
export function bucketWords(ms: number): string {
	if (ms <= 0) return 'one reading';
	const say = (n: number, word: string) => `${Number(n.toPrecision(3))} ${word}${n === 1 ? '' : 's'}`;
	if (ms < 60_000) return say(ms / 1_000, 'second');
	if (ms < 3_600_000) return say(ms / 60_000, 'minute');
	if (ms < 86_400_000) return say(ms / 3_600_000, 'hour');
	return say(ms / 86_400_000, 'day');
}

/** What a trend shows as RFC 4180 text: one row a span, times in UTC. */
export function trendCsv(items: readonly TrendItem[], tag: string, unit: string): string {
	const quoted = (text: string) => (/[",\r\n]/.test(text) ? `"${text.replaceAll('"', '""')}"` : text);
	const rows = items.map((item) =>
		[
			tag,
			item.at,
			item.min ?? '',
			item.max ?? '',
			item.mean ?? '',
			item.n,
			quoted(unit),
			typeof item.worst === 'object' && item.worst !== null ? item.worst.name : (item.worst ?? ''),
		].join(','),
	);
	return ['tag,from,min,max,mean,readings,unit,worst_quality', ...rows, ''].join('\r\n');
}

/** Begin of a limit's note, as far as a margin takes it: what stands before the first comma or bracket. */
export function limitNote(note: string | null | undefined): string {
	return (note ?? '').split(/[,;(]/)[0]!.trim().slice(0, 18);
}
