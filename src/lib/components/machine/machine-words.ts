// Pure.
import type { MachineJson } from '../live/shapes.ts';

const text = (data: Record<string, unknown>, key: string): string | null =>
	data[key] == null || data[key] === '' ? null : String(data[key]);

/** What a machine is, in a line: `pump set, 315 kW, 1,485 r/min · motor ISO 20816-3 group 1, rigid`. */
export function machineWords(machine: Pick<MachineJson, 'description' | 'data'>): string {
	const data = machine.data ?? {};
	const power = text(data, 'power_kw');
	const speed = text(data, 'speed_rpm');
	const what = [
		text(data, 'kind')?.replaceAll('-', ' '),
		power ? `${power} kW` : null,
		speed ? `${Number(speed).toLocaleString('en-GB')} r/min` : null,
	]
		.filter(Boolean)
		.join(', ');
	const group = text(data, 'iso_group');
	const zone = group
		? `motor ISO 20816-3 group ${group}${text(data, 'foundation') ? `, ${text(data, 'foundation')}` : ''}`
		: null;
	const pump = text(data, 'pump_category') ? `pump ISO 10816-7 category ${text(data, 'pump_category')}` : null;
	return [machine.description, what, zone, pump].filter(Boolean).join(' · ');
}

/** Which driven part the picture shows; null for what has no rotor and so no picture. */
export function drivenKind(data: Record<string, unknown>): 'pump' | 'fan' | 'roll' | null {
	const kind = (text(data, 'kind') ?? '').toLowerCase();
	if (/trap|valve|tank|vessel/.test(kind)) return null;
	// A fan pump is a pump: it feeds the machine it is named after.
	if (/pump/.test(kind)) return 'pump';
	if (/fan|blower/.test(kind)) return 'fan';
	if (/roll|refiner/.test(kind)) return 'roll';
	return 'pump';
}

/** Shapes that a picture can draw, by the `kind` of a machine's data. */
export const SHAPES: readonly { value: string; label: string }[] = [
	{ value: 'pump-set', label: 'motor and pump' },
	{ value: 'fan-pump', label: 'motor and fan pump' },
	{ value: 'fan', label: 'motor and fan' },
	{ value: 'blower', label: 'motor and blower' },
	{ value: 'refiner', label: 'motor and refiner' },
	{ value: 'felt-roll', label: 'driven roll' },
	{ value: 'steam-trap', label: 'steam trap, no rotor' },
];

/** A number typed into a form: null for nothing, undefined for what is no number. Takes a decimal comma. */
export function numberOrNull(typed: string): number | null | undefined {
	const clean = typed.trim().replace(',', '.');
	if (clean === '') return null;
	const value = Number(clean);
	return Number.isFinite(value) && value >= 0 ? value : undefined;
}
