// Pure.

/** What says how finely a value can be told apart. */
export interface Resolution {
	low?: number | null;
	high?: number | null;
	/** Step of an integer on the wire, after scaling, where the value is one. */
	step?: number | null;
}

/**
 * Decimals to show: those of the wire's own step, or a thousandth of the range, or three significant digits.
 * A value never shows more than its resolution supports.
 */
export function decimalsFor(value: number, resolution: Resolution | null = null): number {
	if (resolution?.step && resolution.step > 0) return clampDecimals(Math.ceil(-Math.log10(resolution.step) - 1e-9));
	const span = resolution?.high != null && resolution.low != null ? resolution.high - resolution.low : 0;
	if (span > 0) return clampDecimals(3 - Math.floor(Math.log10(span)));
	const size = Math.abs(value);
	if (size === 0) return 1;
	return clampDecimals(2 - Math.floor(Math.log10(size)));
}

function clampDecimals(decimals: number): number {
	return Math.min(4, Math.max(0, decimals));
}

/** A value as text, with a true minus sign, thousands apart from 10,000 on, and a power of ten outside what decimals can show. */
export function formatValue(value: number, resolution: Resolution | null = null): string {
	if (!Number.isFinite(value)) return 'no value';
	const size = Math.abs(value);
	if (size !== 0 && (size >= 1e7 || size < 5e-5)) return value.toExponential(2).replace('e+', 'e').replace(/^-/, '−');
	const decimals = decimalsFor(value, resolution);
	const text = size.toFixed(decimals);
	const [whole = '0', part] = text.split('.');
	const grouped = whole.length > 4 ? whole.replace(/\B(?=(\d{3})+(?!\d))/g, ',') : whole;
	const sign = value < 0 && Number(text) !== 0 ? '−' : '';
	return sign + grouped + (part === undefined ? '' : `.${part}`);
}

/** A limit as it was set, without zeros that nobody typed. */
export function limitText(value: number): string {
	return String(Number(value.toPrecision(6))).replace('-', '−');
}

/** Names of units as people write them, from their UCUM codes. */
const UNIT_WORDS: Readonly<Record<string, string>> = {
	Cel: '°C',
	'[degF]': '°F',
	K: 'K',
	'[in_i]/s': 'in/s',
	'[g]': 'g',
	um: 'µm',
	'm/s2': 'm/s²',
	'[psi]': 'psi',
	'{rpm}': 'r/min',
	'/min': 'r/min',
	'1': '',
	'1/min': 'r/min',
	Hz: 'Hz',
	'[mil_i]': 'mil',
	'm3/h': 'm³/h',
	'dB[mW]': 'dBm',
};
const DETECTOR_WORDS: Readonly<Record<string, string>> = {
	rms: 'rms',
	peak: 'peak',
	'derived-peak': 'derived peak',
	'peak-to-peak': 'peak to peak',
	'derived-peak-to-peak': 'derived peak to peak',
};

/** A unit in one spelling, with its detector where it has one. */
export function unitText(unit: string | null | undefined, detector: string | null | undefined = null): string {
	const word = unit ? (UNIT_WORDS[unit] ?? unit) : '';
	const how = detector ? DETECTOR_WORDS[detector] : undefined;
	return how ? `${word} ${how}`.trim() : word;
}

/** `0=closed;1=open`: the word for a state's value, or null. */
export function stateWord(states: string | null | undefined | Record<string, string>, value: number | null): string | null {
	if (!states || value === null) return null;
	if (typeof states === 'object') return states[String(value)] ?? null;
	for (const pair of states.split(';')) {
		const [number, word] = pair.split('=');
		if (number !== undefined && word !== undefined && Number(number) === value) return word.trim();
	}
	return null;
}

/** A count with thousands apart: 12,345. */
export function count(n: number): string {
	return Math.round(n).toLocaleString('en-GB');
}

/** A count with its noun: `1 tag`, `12 tags`. */
export function counted(n: number, noun: string, plural = `${noun}s`): string {
	return `${count(n)} ${n === 1 ? noun : plural}`;
}
