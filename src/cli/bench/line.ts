// Pure.
/** One line of `npm run bench`: a figure and the bare reference of the same run. */
export interface BenchLine {
	bench: string;
	ours: number;
	reference: number;
	ratio: number;
	unit: string;
	note: string;
	/** CPU seconds for the same work, ours to the reference. */
	cpu_ratio?: number;
}

export function median(numbers: readonly number[]): number {
	const sorted = [...numbers].sort((a, b) => a - b);
	return sorted[sorted.length >> 1] ?? 0;
}

const rounded = (value: number) => (Math.abs(value) >= 1_000 ? Math.round(value) : Number(value.toPrecision(4)));

/** Medians of rounds that ran alternately, and their ratio. */
export function benchLine(
	bench: string,
	ours: readonly number[],
	reference: readonly number[],
	unit: string,
	note: string,
): BenchLine {
	const [a, b] = [median(ours), median(reference)];
	return { bench, ours: rounded(a), reference: rounded(b), ratio: Math.round((a / b) * 1_000) / 1_000, unit, note };
}
