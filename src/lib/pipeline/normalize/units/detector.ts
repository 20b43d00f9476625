// Pure.
import type { Detector } from '#lib/domain/tag-map/row.ts';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';

/** What one unit of each detector is in rms: `derived` ones by definition, true ones only for a single sine. */
const IN_RMS: Record<Exclude<Detector, 'none'>, { factor: number; isTrue: boolean }> = {
	rms: { factor: 1, isTrue: false },
	'derived-peak': { factor: Math.SQRT1_2, isTrue: false },
	'derived-peak-to-peak': { factor: Math.SQRT1_2 / 2, isTrue: false },
	peak: { factor: Math.SQRT1_2, isTrue: true },
	'peak-to-peak': { factor: Math.SQRT1_2 / 2, isTrue: true },
};

export type DetectorRefusal = 'true-peak-without-frequency' | 'detector-unknown';

/**
 * Factor between two detectors of the same vibration.
 * Source: for a sine, peak = √2 × rms and peak-to-peak = 2 × peak; derived values are defined so.
 * Refusals: 'true-peak-without-frequency' where a true peak or peak-to-peak becomes another detector and no frequency declares one sine;
 * 'detector-unknown' where only one side says its detector.
 */
export function detectorFactor(from: Detector, to: Detector, hasFrequency: boolean): Outcome<number, DetectorRefusal> {
	if (from === to) return ok(1);
	if (from === 'none' || to === 'none') return refuse('detector-unknown', `${from} to ${to}: one side does not say its detector`);
	const [a, b] = [IN_RMS[from], IN_RMS[to]];
	if ((a.isTrue || b.isTrue) && !hasFrequency) {
		return refuse(
			'true-peak-without-frequency',
			`${from} to ${to} holds for a single sine only; give frequency_hz or another detector`,
		);
	}
	return ok(a.factor / b.factor);
}
