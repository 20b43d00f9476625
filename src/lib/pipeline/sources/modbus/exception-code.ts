// Pure.
/** What a Modbus exception says [Modbus AP v1.1b3 §7]. */
const WORDS: Readonly<Record<number, string>> = {
	1: 'the device does not know this function',
	2: 'the device has no such address',
	3: 'the device refuses this number of registers',
	4: 'the device failed while answering',
	5: 'the device needs longer and acknowledged only',
	6: 'the device is busy',
	8: 'the device found a memory fault',
	10: 'the gateway has no path to the unit',
	11: 'the gateway got no answer from the unit',
};

/** An exception in words, with its number. */
export function exceptionWords(code: number): string {
	return `exception ${code}: ${WORDS[code] ?? 'not in the standard'}`;
}

/** Exceptions that ask for patience rather than for another address. */
export function asksForPatience(code: number): boolean {
	return code === 5 || code === 6 || code === 10 || code === 11;
}
