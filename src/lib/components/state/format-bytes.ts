// Pure.
const UNITS = ['B', 'kB', 'MB', 'GB', 'TB', 'PB'] as const;

/** A size with three digits at most, in powers of a thousand as disks are sold: `9.41 GB`. */
export function formatBytes(bytes: number): { value: string; unit: string } {
	let size = Math.abs(bytes);
	let place = 0;
	while (size >= 999.5 && place < UNITS.length - 1) {
		size /= 1_000;
		place += 1;
	}
	const decimals = place === 0 || size >= 99.95 ? 0 : size >= 9.995 ? 1 : 2;
	return { value: (bytes < 0 ? '−' : '') + size.toFixed(decimals), unit: UNITS[place] ?? 'B' };
}

/** The same as words in a sentence. */
export function bytesText(bytes: number): string {
	const { value, unit } = formatBytes(bytes);
	return `${value} ${unit}`;
}
