// Pure.
import type { EventName } from './events.ts';
import { bell, even } from './noise.ts';
import type { Signal } from './parts.ts';

const DAY = 86_400_000;
/** Derived peak in inches a second for one millimetre a second rms: sqrt 2 / 25.4. */
const INCH_PEAK_PER_MM_RMS = Math.SQRT2 / 25.4;

/** Strength of an event, 0 where it does not stand. */
export type StrengthOf = (name: EventName) => number;

/** Share of the full duty a station runs at: less by night, most in the morning and the evening. */
function duty(at: number): number {
	const turn = ((at % DAY) / DAY) * 2 * Math.PI;
	return 0.86 + 0.08 * Math.sin(turn - 2) + 0.05 * Math.sin(2 * turn - 1);
}

/** Physical value of a signal at the moment it is measured, in the signal's unit, before the sensor spoils it. */
export function physicalValue(seed: number, signal: Signal, index: number, at: number, strength: StrengthOf): number {
	const noise = bell(seed, signal.path, index);
	const drift = 1 + 0.06 * Math.sin((at / DAY) * 2 * Math.PI + 6 * even(seed, signal.path));
	switch (signal.trait) {
		case 'velocity':
		case 'once-per-turn':
		case 'vane-pass':
			return inUnit(signal, velocity(signal, strength) * drift * (1 + 0.03 * noise));
		case 'impact': {
			const lubrication = strength('hl2-lubrication');
			const bearing = strength('hl6-bearing');
			return Math.max(0, signal.normal * drift * (1 + 0.09 * noise) + 6.6 * lubrication + 7.5 * bearing);
		}
		case 'acceleration':
			return Math.max(
				0.02,
				signal.normal * drift * (1 + 0.06 * noise) + 0.9 * strength('hl2-lubrication') + 0.8 * strength('hl6-bearing'),
			);
		case 'periodicity':
			return clamp(signal.normal + 2 * noise + 66 * strength('hl6-bearing'), 0, 100);
		case 'temperature':
			return (
				signal.normal * (0.82 + 0.2 * duty(at)) +
				6 * even(signal.path) +
				0.4 * noise +
				9 * strength('hl2-lubrication') +
				4 * strength('hl6-bearing')
			);
		case 'battery':
			return clamp(Math.round(62 + 36 * even(seed, signal.path) - 75 * strength('battery-low')), 3, 100);
		case 'radio':
			return clamp(Math.round(signal.normal + 12 * even(signal.path) + 2 * noise), 0, 100);
		case 'age':
			return 0;
		case 'valid':
			return 1;
		case 'flow':
			return signal.normal * duty(at) * (1 + 0.012 * noise) * (1 - 0.48 * strength('ll2-vane-pass'));
		case 'pressure':
			return signal.normal * (1.06 - 0.08 * duty(at) + 0.07 * strength('ll2-vane-pass')) * (1 + 0.006 * noise);
		case 'power':
		case 'current':
			return signal.normal * (0.3 + 0.7 * duty(at)) * (1 + 0.008 * noise) * (1 - 0.2 * strength('ll2-vane-pass'));
		case 'speed':
			return signal.normal * (1 + 0.0008 * noise);
		case 'level':
			return signal.normal * (1.1 - 0.12 * duty(at)) + 0.01 * noise;
		case 'trap-temperature':
			return signal.normal * drift + 1.5 * noise + 34 * strength('trap-leak');
		case 'trap-state':
			return strength('trap-leak') > 0.5 ? 1 : 0;
	}
}

/** Velocity in mm/s rms that the machine shows, with its faults. */
function velocity(signal: Signal, strength: StrengthOf): number {
	const unbalance = strength('hl3-unbalance');
	const vanes = strength('ll2-vane-pass');
	const bearing = strength('hl6-bearing');
	const radial = signal.axis !== 'axial';
	const atPump = signal.point === 'PDE' || signal.point === 'PNDE';
	if (signal.trait === 'vane-pass') return signal.normal + 1.9 * vanes * (atPump ? 1 : 0.4);
	if (signal.trait === 'once-per-turn') return signal.normal;
	// Unbalance pulls across the shaft, most where the pump is, and hardly along it.
	const pull = radial ? (atPump ? 6.6 : 3.1) * (signal.axis === 'vertical' ? 0.6 : 1) : 0.4;
	return signal.normal + pull * unbalance + (atPump ? 1.4 : 0.5) * vanes + 0.5 * bearing;
}

function inUnit(signal: Signal, mmPerSecondRms: number): number {
	const positive = Math.max(0.05, mmPerSecondRms);
	return signal.unit === '[in_i]/s' ? positive * INCH_PEAK_PER_MM_RMS : positive;
}

function clamp(value: number, low: number, high: number): number {
	return Math.min(high, Math.max(low, value));
}
