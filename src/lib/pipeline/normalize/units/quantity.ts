// Pure.
import type { Detector, Quantity } from '#lib/domain/tag-map/row.ts';
import { lineBetween, isUnit } from './ucum.ts';

/** Units whose dimension each quantity may have. Impact indicators are given as acceleration, in decibels or as bare numbers. */
const MEASURES: Record<Quantity, readonly string[]> = {
	velocity: ['m/s'],
	acceleration: ['m/s2'],
	displacement: ['m'],
	impact: ['m/s2', 'dB', '1', 'm/s'],
	temperature: ['Cel'],
	pressure: ['Pa'],
	'differential-pressure': ['Pa'],
	flow: ['m3/s', 'kg/s', '%'],
	level: ['m', '%', '1', 'm3'],
	speed: ['/s', 'm/s', '1'],
	power: ['W', 'V.A', '%'],
	current: ['A', '%'],
	voltage: ['V'],
	frequency: ['Hz'],
	battery: ['%', 'V', '1', 'd'],
	signal: ['dB', '%', '1', 'W'],
	state: ['1'],
	count: ['1'],
	ratio: ['1', '%'],
};

/** True when the unit can measure the quantity; a quantity that is not in the list is never refused here. */
export function fitsQuantity(unit: string, quantity: string): boolean {
	const bases = MEASURES[quantity as Quantity] as readonly string[] | undefined;
	if (!bases || !isUnit(unit)) return true;
	// Annotated units ({rpm}, dB{mW}) measure what they measure without the annotation.
	const bare = unit.replace(/\{[^}]*\}/g, '') || '1';
	return bases.some((base) => bare === base || lineBetween(bare, base) !== null);
}

const SHOWN: Record<string, string> = {
	Cel: '°C',
	'[degF]': '°F',
	K: 'K',
	'[in_i]/s': 'in/s',
	'[in_i]': 'in',
	'[mil_i]': 'mil',
	'[g]': 'g',
	'm/s2': 'm/s²',
	um: 'µm',
	'/min': 'r/min',
	'{rpm}': 'r/min',
	'1': '',
	'[psi]': 'psi',
	'm3/h': 'm³/h',
	'dB{mW}': 'dBm',
	'L/s': 'l/s',
};
const DETECTOR_WORDS: Record<Detector, string> = {
	rms: 'rms',
	peak: 'peak',
	'derived-peak': 'derived peak',
	'peak-to-peak': 'peak to peak',
	'derived-peak-to-peak': 'derived peak to peak',
	none: '',
};

/** One spelling a unit, for screens: `mm/s rms`, `in/s derived peak`, `°C`. */
export function unitLabel(unit: string, detector: string): string {
	return [SHOWN[unit] ?? unit, DETECTOR_WORDS[detector as Detector] ?? ''].filter(Boolean).join(' ');
}
