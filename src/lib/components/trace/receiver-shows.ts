// Pure.
import type { Trace, TraceHop } from '#lib/domain/trace.ts';
import { formatValue } from '../state/format-value.ts';

/** Where a receiver's number would come from, in words. */
export interface ReceiverVerdict {
	/** Index of the station that gives it; null where none does. */
	hop: number | null;
	words: string;
	/** Further ways to that number, less likely; at most two. */
	others: string[];
}

/** A number as somebody typed it, and half of its last digit: it may have been rounded by as much. */
export interface ShownNumber {
	value: number;
	half: number;
	/** Digits that count: 1 for `5`, 3 for `6.38`. */
	digits: number;
}

/** Reads what a receiver shows: `6.38`, `6,38`, `−1.2`, `4.5e-3`. Null where it is no number. */
export function readShown(text: string): ShownNumber | null {
	const match = /^([+-]?)(\d*)(?:\.(\d*))?(?:e([+-]?\d{1,3}))?$/i.exec(
		text.trim().replace(/\s+/g, '').replace('−', '-').replace(',', '.'),
	);
	if (!match || (match[2] === '' && !match[3])) return null;
	const [, sign, whole = '', part = '', power] = match;
	const exponent = Number(power ?? 0);
	const value = Number(`${sign}${whole || '0'}.${part || '0'}e${exponent}`);
	const digits = `${whole}${part}`.replace(/^0+/, '').length;
	return { value, half: 0.5 * 10 ** (exponent - part.length), digits };
}

/** What a receiver commonly does to a number on its side, with its factor. Exact by definition, but for those that guess at a scale. */
const TWISTS: readonly { factor: number; words: string }[] = [
	{ factor: Math.SQRT2, words: 'read as peak instead of rms' },
	{ factor: Math.SQRT1_2, words: 'read as rms instead of peak' },
	{ factor: 2 * Math.SQRT2, words: 'read as peak to peak instead of rms' },
	{ factor: 2, words: 'read as peak to peak of a peak' },
	{ factor: 1 / 25.4, words: 'read in inches instead of millimetres' },
	{ factor: 25.4, words: 'converted from inches a second time' },
	{ factor: Math.SQRT2 / 25.4, words: 'read in in/s peak' },
	{ factor: 9.80665, words: 'read in m/s² instead of g' },
	{ factor: 1 / 9.80665, words: 'read in g instead of m/s²' },
	{ factor: 10, words: 'read with a decimal place too few' },
	{ factor: 0.1, words: 'read with a decimal place too many' },
	{ factor: 100, words: 'read without its scale of 0.01' },
	{ factor: 0.01, words: 'scaled by 0.01 a second time' },
	{ factor: 1_000, words: 'read a thousand times too large' },
	{ factor: 0.001, words: 'read a thousand times too small' },
];
/** The value moves on while somebody reads the other screen: as much apart is the same, even where more digits were typed. */
const SAME = 0.006;

function numberOf(hop: TraceHop): number | null {
	return typeof hop.after === 'number' ? hop.after : null;
}

/**
 * Answers 'the receiver shows x' by the station that would give that number: as it is, or twisted in a way that is common, or the same
 * bytes read another way (type, sign, word order, byte order) and carried on as far as the tag's own were.
 */
export function explainReceiver(trace: Trace, shown: ShownNumber): ReceiverVerdict {
	const final = trace.value;
	const { hops } = trace;
	const text = formatValue(shown.value);
	const isClose = (to: number) => Math.abs(shown.value - to) <= Math.max(shown.half * 1.0001, Math.abs(to) * SAME, 1e-12);
	const found: { hop: number; words: string }[] = [];
	const add = (hop: number, words: string) => {
		if (!found.some((one) => one.words === words)) found.push({ hop, words });
	};
	if (final !== null && isClose(final))
		return { hop: lastNumeric(hops), words: 'the receiver shows what the hub delivers', others: [] };
	// From the end, so that the station nearest to the receiver is named first; equal neighbours count once.
	let known: number | null = final;
	for (let index = hops.length - 1; index >= 0; index -= 1) {
		const value = numberOf(hops[index]!);
		if (value === null) continue;
		if (isClose(value) && value !== known) {
			const left = hops[index + 1];
			const name = left ? hopTitle(left.hop).toLowerCase() : 'everything after it';
			add(left ? index + 1 : index, `${text} is ${name} left out: the receiver reads ${hops[index]!.unit || 'the raw number'}`);
		}
		known = value;
	}
	const isTelling = shown.value !== 0 && shown.digits >= 2;
	if (final !== null && final !== 0) {
		for (const twist of TWISTS)
			if (isClose(final * twist.factor)) add(twistHop(hops), `${text} is the hub’s value ${twist.words}`);
		if (trace.unit === 'Cel' && isClose(final * 1.8 + 32)) add(twistHop(hops), `${text} is the hub’s value in °F`);
		if (trace.unit === 'Cel' && isClose((final - 32) / 1.8))
			add(twistHop(hops), `${text} is the hub’s value taken as °F and turned into °C`);
		if (trace.unit === 'Cel' && isClose(final + 273.15)) add(twistHop(hops), `${text} is the hub’s value in kelvin`);
		if (isClose(-final)) add(lastNumeric(hops), `${text} is the hub’s value with its sign turned round`);
	}
	// Any bytes give some number: one digit would fit too often.
	for (const other of isTelling ? (trace.decodings ?? []) : []) {
		const decode = Math.max(
			0,
			hops.findIndex((hop) => hop.hop === 'decode'),
		);
		const far = isClose(other.value)
			? 'scaled and converted as here'
			: isClose(other.scaled)
				? 'scaled as here, not converted'
				: isClose(other.raw)
					? 'neither scaled nor converted'
					: null;
		if (far) add(decode, `${text} is these bytes read as ${other.words}, ${far}`);
	}
	const [first, ...others] = found;
	if (first) return { ...first, others: others.slice(0, 2).map((one) => one.words) };
	return {
		hop: null,
		words: 'no station gives that number, nor a usual slip of unit, scale, sign or word order: compare tag and address first',
		others: [],
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
