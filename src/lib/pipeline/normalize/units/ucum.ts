// Pure.
import ucum, { type UcumLhcUtils } from '@lhncbc/ucum-lhc';

/** value in the new unit = value × factor + offset. */
export interface Line {
	factor: number;
	offset: number;
}

// The library reads its table on first use; that takes some 100 ms, so it is not done at import.
let utils: UcumLhcUtils | undefined;
const valid = new Map<string, boolean>();
const lines = new Map<string, Line | null>();

function ucumUtils(): UcumLhcUtils {
	utils ??= ucum.UcumLhcUtils.getInstance();
	return utils;
}

/** True for a unit by the Unified Code for Units of Measure, annotations in braces included. */
export function isUnit(code: string): boolean {
	let known = valid.get(code);
	if (known === undefined) {
		known = code.trim() === code && code !== '' && ucumUtils().validateUnitString(code).status === 'valid';
		valid.set(code, known);
	}
	return known;
}

/** Cuts the noise that binary arithmetic leaves in the library's answers: 25.400000000000002 is 25.4. */
function denoise(value: number): number {
	return Number(value.toPrecision(14));
}

/**
 * The straight line that converts one unit into another; null where they do not measure the same or the relation is no line (logarithms).
 * Source: UCUM, by the library's table.
 */
export function lineBetween(from: string, to: string): Line | null {
	if (from === to) return { factor: 1, offset: 0 };
	const key = `${from}\u0000${to}`;
	const known = lines.get(key);
	if (known !== undefined) return known;
	const at = (value: number) => {
		const answer = ucumUtils().convertUnitTo(from, value, to);
		return answer.status === 'succeeded' && answer.toVal !== null && Number.isFinite(answer.toVal) ? answer.toVal : null;
	};
	const line = isUnit(from) && isUnit(to) ? lineThrough(at) : null;
	lines.set(key, line);
	return line;
}

function lineThrough(at: (value: number) => number | null): Line | null {
	const [zero, one, thousand] = [at(0), at(1), at(1_000)];
	if (zero === null || one === null || thousand === null) return null;
	const factor = denoise((thousand - zero) / 1_000);
	const offset = Math.abs(zero) < 1e-12 ? 0 : denoise(zero);
	// Three points on one line, or it is a logarithm or the like.
	return Math.abs(one - (factor + offset)) <= 1e-9 * Math.max(1, Math.abs(one)) ? { factor, offset } : null;
}
