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

/** Lays a trend out for drawing. `expectedMs` is how far apart raw points may be before it is a gap. */
export function trendColumns(items: readonly TrendItem[], expectedMs = 0): TrendColumns {
	const bucketMs = bucketOf(items);
	const tooFar = Math.max(bucketMs * 1.9, expectedMs * 3);
	const columns: TrendColumns = { at: [], min: [], max: [], mean: [], bands: [], bucketMs };
	const band = (from: number, to: number, kind: 'gap' | 'bad' | 'uncertain') => {
		const last = columns.bands[columns.bands.length - 1];
		if (last && last.kind === kind && from <= last.to + 0.001) last.to = to;
		else columns.bands.push({ from, to, kind });
	};
	items.forEach((item, index) => {
		const ms = Date.parse(item.at);
		const before = index > 0 ? Date.parse(items[index - 1]!.at) : null;
		if (before !== null && tooFar > 0 && ms - before > tooFar) {
			columns.at.push((before + bucketMs) / 1_000);
			columns.min.push(null);
			columns.max.push(null);
			columns.mean.push(null);
			band((before + bucketMs) / 1_000, ms / 1_000, 'gap');
		}
		columns.at.push(ms / 1_000);
		columns.min.push(item.min);
		columns.max.push(item.max);
		columns.mean.push(item.mean);
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
