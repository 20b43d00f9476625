// Pure.
/** Tries before a message is given up: with the delays below about a day and a half. */
export const MOST_ATTEMPTS = 40;
const FIRST_S = 10;
const LONGEST_S = 3_600;

/** Seconds until the next try after `attempts` failed ones: doubling from 10 s, never above an hour. `spread` in [0, 1) keeps a crowd from returning together. */
export function retryDelayS(attempts: number, spread: number): number {
	const base = Math.min(LONGEST_S, FIRST_S * 2 ** Math.min(20, Math.max(0, attempts - 1)));
	return base * (0.75 + 0.25 * spread);
}
