// Pure.
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import type { Detector } from '#lib/domain/tag-map/row.ts';
import { detectorFactor, type DetectorRefusal } from './detector.ts';
import { harmonicFactor, type Motion } from './harmonic.ts';
import { isUnit, lineBetween, type Line } from './ucum.ts';

export type { Line };
export type ConversionRefusal = DetectorRefusal | 'no-frequency' | 'unknown-unit' | 'no-conversion';

export interface ConversionInput {
	rawUnit: string;
	rawDetector: Detector;
	unit: string;
	detector: Detector;
	frequencyHz: number | null;
}

const MOTION_BASE: Record<Motion, string> = { displacement: 'm', velocity: 'm/s', acceleration: 'm/s2' };

/**
 * The line that turns a scaled raw value into the tag's unit and detector; made once a tag, so that the hot path only multiplies.
 *
 * Units:    any UCUM codes of one dimension, or displacement, velocity and acceleration among each other with a frequency.
 * Refusals: 'unknown-unit', 'no-conversion' for units that do not measure the same, 'no-frequency', and those of `detectorFactor`.
 */
export function compileConversion(input: ConversionInput): Outcome<Line, ConversionRefusal> {
	const { rawUnit, rawDetector, unit, detector, frequencyHz } = input;
	for (const code of [rawUnit, unit]) if (!isUnit(code)) return refuse('unknown-unit', `"${code}" is not a UCUM unit`);
	const hasFrequency = frequencyHz !== null && Number.isFinite(frequencyHz) && frequencyHz > 0;
	const byDetector = detectorFactor(rawDetector, detector, hasFrequency);
	if (!byDetector.ok) return byDetector;
	const direct = lineBetween(rawUnit, unit);
	if (direct) return ok({ factor: direct.factor * byDetector.value, offset: direct.offset * byDetector.value });
	const [from, to] = [motionOf(rawUnit), motionOf(unit)];
	if (!from || !to) return refuse('no-conversion', `${rawUnit} does not convert to ${unit}`);
	const harmonic = harmonicFactor(from, to, frequencyHz);
	if (!harmonic.ok) return harmonic;
	const toBase = lineBetween(rawUnit, MOTION_BASE[from]);
	const fromBase = lineBetween(MOTION_BASE[to], unit);
	if (!toBase || !fromBase) return refuse('no-conversion', `${rawUnit} does not convert to ${unit}`);
	return ok({ factor: toBase.factor * harmonic.value * fromBase.factor * byDetector.value, offset: 0 });
}

/** Which kind of motion a unit measures; null for anything else. */
export function motionOf(unit: string): Motion | null {
	for (const [motion, base] of Object.entries(MOTION_BASE) as [Motion, string][]) if (lineBetween(unit, base)) return motion;
	return null;
}

/** A difference converts without the offset: 18 degF of difference are 10 degC. */
export function convertDifference(difference: number, line: Line): number {
	return difference * line.factor;
}
