// Pure.
import type { Trace, TraceHop } from '#lib/domain/trace.ts';
import { formatValue } from '../state/format-value.ts';

/** Where a receiver's number would come from, in words. */
export interface ReceiverVerdict {
	/** Index of the station that gives it; null where none does. */
	hop: number | null;
	words: string;
}

const SAME = 0.006;
const close = (a: number, b: number) => Math.abs(a - b) <= Math.max(Math.abs(b) * SAME, 1e-9);

/** What a receiver commonly does to a number on its side, with its factor. Exact by definition but for the last two, which guess at a scale. */
const TWISTS: readonly { factor: number; words: string }[] = [
	{ factor: Math.SQRT2, words: 'read as peak instead of rms' },
	{ factor: Math.SQRT1_2, words: 'read as rms instead of peak' },
	{ factor: 2, words: 'read as peak to peak of a peak' },
	{ factor: 2 * Math.SQRT2, words: 'read as peak to peak instead of rms' },
	{ factor: 1 / 25.4, words: 'read in inches instead of millimetres' },
	{ factor: 25.4, words: 'converted from inches a second time' },
	{ factor: Math.SQRT2 / 25.4, words: 'read in in/s peak' },
	{ factor: 10, words: 'read with a decimal place too few' },
	{ factor: 0.1, words: 'read with a decimal place too many' },
	{ factor: 100, words: 'read without its scale of 0.01' },
	{ factor: 0.01, words: 'scaled by 0.01 a second time' },
];

function numberOf(hop: TraceHop): number | null {
	return typeof hop.after === 'number' ? hop.after : null;
}

/**
 * Answers 'the receiver shows x' by the station that would give that number: as it is, or twisted in a way that is common.
 * `candidates` are decodings of the same bytes that were not chosen.
 */
export function explainReceiver(
	trace: Trace,
	shown: number,
	candidates: readonly { value: number; words: string }[] = [],
): ReceiverVerdict {
	const final = trace.value;
	const hops = trace.hops;
	if (final !== null && close(shown, final)) return { hop: lastNumeric(hops), words: 'the receiver shows what the hub delivers' };
	for (let index = hops.length - 1; index >= 0; index -= 1) {
		const value = numberOf(hops[index]!);
		if (value !== null && close(shown, value)) {
			const left = hops[index + 1];
			const name = left ? hopTitle(left.hop).toLowerCase() : 'everything after it';
			return {
				hop: left ? index + 1 : index,
				words: `${formatValue(shown)} is ${name} left out: the receiver reads ${hops[index]!.unit || 'the raw number'}`,
			};
		}
	}
	for (const candidate of candidates)
		if (close(shown, candidate.value))
			return { hop: 1, words: `${formatValue(shown)} is these bytes read as ${candidate.words}` };
	if (final !== null && final !== 0) {
		for (const twist of TWISTS) {
			if (close(shown, final * twist.factor))
				return { hop: twistHop(hops), words: `${formatValue(shown)} is the hub’s value ${twist.words}` };
		}
		if (close(shown, final * 1.8 + 32)) return { hop: twistHop(hops), words: `${formatValue(shown)} is the hub’s value in °F` };
		if (close(shown, (final - 32) / 1.8))
			return { hop: twistHop(hops), words: `${formatValue(shown)} is the hub’s value taken as °F and turned into °C` };
		if (close(shown, -final)) return { hop: twistHop(hops), words: 'the receiver has the sign turned round' };
	}
	return {
		hop: null,
		words: 'no station gives that number, nor a usual slip of unit, scale or word order: compare tag and address first',
	};
}

function lastNumeric(hops: readonly TraceHop[]): number {
	for (let index = hops.length - 1; index >= 0; index -= 1) if (numberOf(hops[index]!) !== null) return index;
	return hops.length - 1;
}
function twistHop(hops: readonly TraceHop[]): number {
	const index = hops.findIndex((hop) => hop.hop === 'convert');
	return index >= 0 ? index : lastNumeric(hops);
}

const TITLES: Record<TraceHop['hop'], string> = {
	wire: 'On the wire',
	decode: 'Decode',
	scale: 'Scale',
	convert: 'Convert',
	quality: 'Quality',
	verdict: 'Verdict',
	stored: 'Stored',
	feed: 'Feed',
};
export function hopTitle(hop: TraceHop['hop']): string {
	return TITLES[hop];
}

/** A station's figure: the whole number as it is on its way, not rounded for the eye beyond seven figures. */
export function hopFigure(value: TraceHop['after']): string {
	if (value === null) return 'no value';
	if (typeof value === 'number') return String(Number(value.toPrecision(7))).replace('-', '−');
	return value;
}
