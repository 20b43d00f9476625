// Pure.
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';

export type Motion = 'displacement' | 'velocity' | 'acceleration';
const ORDER: Record<Motion, number> = { displacement: 0, velocity: 1, acceleration: 2 };

/**
 * Factor that turns one kind of motion into another for a single sine.
 *
 * Units:    SI base: m, m/s, m/s²; `frequencyHz` in hertz. The detector stays as it was.
 * Source:   simple harmonic motion, v = 2πf × d and a = 2πf × v.
 * Refusals: 'no-frequency' unless `frequencyHz` is finite and above zero.
 */
export function harmonicFactor(from: Motion, to: Motion, frequencyHz: number | null): Outcome<number, 'no-frequency'> {
	if (from === to) return ok(1);
	if (frequencyHz === null || !Number.isFinite(frequencyHz) || frequencyHz <= 0) {
		return refuse('no-frequency', `${from} becomes ${to} only with frequency_hz, as a single sine`);
	}
	return ok((2 * Math.PI * frequencyHz) ** (ORDER[to] - ORDER[from]));
}
