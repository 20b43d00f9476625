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

/** Which driven part the picture shows. */
export function drivenKind(data: Record<string, unknown>): 'pump' | 'fan' | 'roll' {
	const kind = (text(data, 'kind') ?? '').toLowerCase();
	if (/fan|blower/.test(kind)) return 'fan';
	if (/roll|refiner/.test(kind)) return 'roll';
	return 'pump';
}
