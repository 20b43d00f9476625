// Pure.
import type { Area, Machine, Point, Site, SiteSlug } from './parts.ts';

export const SITES: readonly Site[] = [
	{ slug: 'saltmere', name: 'Saltmere Pumping Station', timeZone: 'Europe/London' },
	{ slug: 'corran', name: 'Corran Board Mill', timeZone: 'Europe/London' },
];

export const AREAS: readonly Area[] = [
	...['Low Lift', 'High Lift', 'Dosing'].map((name): Area => ({ site: 'saltmere', name })),
	...['Stock Preparation', 'Machine 2', 'Boiler House'].map((name): Area => ({ site: 'corran', name })),
];

/** Names that count up: HL-1, HL-2 and so on. */
function numbered(prefix: string, count: number): string[] {
	return Array.from({ length: count }, (_, index) => `${prefix}-${index + 1}`);
}

const still = {
	powerKw: null,
	speedRpm: null,
	isoGroup: null,
	foundation: null,
	orientation: null,
	vanes: null,
	pumpCategory: null,
} as const;

export const MACHINES: readonly Machine[] = [
	...numbered('HL', 6).map((name): Machine => ({
		site: 'saltmere',
		area: 'High Lift',
		name,
		kind: 'pump-set',
		powerKw: 315,
		speedRpm: 1_485,
		isoGroup: 1,
		foundation: name === 'HL-5' ? 'flexible' : 'rigid',
		orientation: 'horizontal',
		vanes: 6,
		pumpCategory: 'I',
	})),
	...numbered('LL', 4).map((name): Machine => ({
		site: 'saltmere',
		area: 'Low Lift',
		name,
		kind: 'pump-set',
		powerKw: 90,
		speedRpm: 985,
		isoGroup: 2,
		foundation: 'flexible',
		orientation: 'vertical',
		vanes: 5,
		pumpCategory: 'I',
	})),
	...numbered('B', 2).map((name): Machine => ({
		site: 'saltmere',
		area: 'Dosing',
		name,
		kind: 'blower',
		powerKw: 45,
		speedRpm: 2_960,
		isoGroup: 2,
		foundation: 'rigid',
		orientation: 'horizontal',
		vanes: null,
		pumpCategory: null,
	})),
	...turning('Stock Preparation', 'refiner', numbered('R', 2), 800, 595, 1),
	...turning('Machine 2', 'fan-pump', numbered('FP', 3), 250, 990, 2),
	...turning('Machine 2', 'felt-roll', numbered('FR', 4), 5, 85, null),
	...turning('Boiler House', 'fan', numbered('FD', 2), 160, 1_480, 2),
	...numbered('ST', 8).map((name): Machine => ({
		site: 'corran',
		area: 'Boiler House',
		name,
		kind: 'steam-trap',
		...still,
	})),
];

function turning(
	area: string,
	kind: Machine['kind'],
	names: readonly string[],
	powerKw: number,
	speedRpm: number,
	isoGroup: 1 | 2 | null,
): Machine[] {
	return names.map((name) => ({
		...still,
		site: 'corran',
		area,
		name,
		kind,
		powerKw,
		speedRpm,
		isoGroup,
		foundation: 'rigid',
		orientation: 'horizontal',
		vanes: kind === 'fan-pump' ? 6 : null,
		pumpCategory: kind === 'fan-pump' ? 'II' : null,
	}));
}

const MNDE = { name: 'MNDE', title: 'motor non-drive end', part: 'motor' } as const;
const MDE = { name: 'MDE', title: 'motor drive end', part: 'motor' } as const;
const PDE = { name: 'PDE', title: 'pump drive end', part: 'driven' } as const;
const PNDE = { name: 'PNDE', title: 'pump non-drive end', part: 'driven' } as const;
const BDE = { name: 'BDE', title: 'blower drive end', part: 'driven' } as const;
const FDE = { name: 'FDE', title: 'driven machine, drive end', part: 'driven' } as const;
const FNDE = { name: 'FNDE', title: 'driven machine, non-drive end', part: 'driven' } as const;

/** Bearings a machine is measured at, numbered from the motor's free end. */
function pointsOf(machine: Machine): readonly Pick<Point, 'name' | 'title' | 'part'>[] {
	switch (machine.kind) {
		case 'pump-set':
			return machine.powerKw !== null && machine.powerKw > 200 ? [MNDE, MDE, PDE, PNDE] : [MNDE, MDE, PDE];
		case 'blower':
			return [MNDE, MDE, BDE];
		case 'refiner':
		case 'fan-pump':
		case 'fan':
			return [MDE, FDE, FNDE];
		case 'felt-roll':
			return [FDE, FNDE];
		case 'steam-trap':
			return [{ name: 'BODY', title: 'trap body', part: 'process' }];
	}
}

export const POINTS: readonly Point[] = MACHINES.flatMap((machine) =>
	pointsOf(machine).map((point): Point => ({ site: machine.site, machine: machine.name, ...point })),
);

export function machineOf(site: SiteSlug, name: string): Machine | undefined {
	return MACHINES.find((machine) => machine.site === site && machine.name === name);
}
