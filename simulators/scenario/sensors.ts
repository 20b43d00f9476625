// Pure.
import { MACHINES, POINTS } from './layout.ts';
import { even } from './noise.ts';
import type { Axis, Gateway, Machine, Point, Sensor, Signal } from './parts.ts';

export const PERIOD_MS: Record<Gateway, number> = {
	a: 60_000,
	b: 600_000,
	broker: 5_000,
	sparkplug: 10_000,
	rtu: 60_000,
};

const ON_GATEWAY_A = new Set(['HL-1', 'HL-2', 'HL-5', 'HL-6']);

/** The gateway whose radio hears the sensor at a point; null where no sensor is fitted. */
function gatewayOf(machine: Machine, point: Point): Gateway | null {
	if (machine.site === 'corran') return machine.area === 'Boiler House' ? 'rtu' : 'sparkplug';
	if (ON_GATEWAY_A.has(machine.name)) return 'a';
	if (machine.kind === 'blower') return point.name === 'MNDE' ? null : 'a';
	if (machine.name === 'LL-1') return point.name === 'MDE' ? 'a' : null;
	return 'b';
}

const placed = POINTS.flatMap((point) => {
	const machine = MACHINES.find((one) => one.site === point.site && one.name === point.machine);
	const gateway = machine ? gatewayOf(machine, point) : null;
	return machine && gateway ? [{ machine, point, gateway }] : [];
});

export const SENSORS: readonly Sensor[] = placed.map(({ machine, point, gateway }) => ({
	site: machine.site,
	name: `${machine.name}.${point.name}`,
	serial: `${gateway.slice(0, 1).toUpperCase()}${String(40_000 + Math.floor(even('serial', machine.name, point.name) * 50_000))}`,
	machine: machine.name,
	point: point.name,
	gateway,
	periodMs: PERIOD_MS[gateway],
}));

type Leaf = Pick<Signal, 'quantity' | 'unit' | 'detector' | 'low' | 'high' | 'trait' | 'normal' | 'title'> & {
	suffix: string;
	axis?: Axis;
	scale?: number;
};

function velocity(suffix: string, axis: Axis, normal: number): Leaf {
	return {
		suffix,
		axis,
		quantity: 'velocity',
		unit: 'mm/s',
		detector: 'rms',
		low: 0,
		high: 50,
		trait: 'velocity',
		normal,
		title: `velocity, ${axis}`,
	};
}
function plain(
	suffix: string,
	trait: Signal['trait'],
	quantity: Signal['quantity'],
	unit: string,
	range: readonly [number, number],
	normal: number,
	title: string,
): Leaf {
	return { suffix, trait, quantity, unit, detector: 'none', low: range[0], high: range[1], normal, title };
}

const TEMPERATURE = plain('TEMP', 'temperature', 'temperature', 'Cel', [-40, 150], 52, 'housing temperature');
const BATTERY = plain('BATT', 'battery', 'battery', '%', [0, 100], 84, 'battery charge');
const RADIO = plain('SIG', 'radio', 'signal', '%', [0, 100], 76, 'radio signal');
const IMPACT: Leaf = {
	...plain('HFP', 'impact', 'impact', '[g]', [0, 50], 1.8, 'high-frequency peak'),
	detector: 'peak',
};
const SHAKE: Leaf = {
	...plain('ACC', 'acceleration', 'acceleration', '[g]', [0, 20], 0.32, 'acceleration'),
	detector: 'rms',
};
const PERIODIC = plain('PER', 'periodicity', 'ratio', '%', [0, 100], 8, 'share of the impacts that repeats');
const ONCE: Leaf = { ...velocity('1X', 'horizontal', 1.1), trait: 'once-per-turn', title: 'once-per-turn velocity' };
const VANE: Leaf = { ...velocity('VPF', 'horizontal', 0.35), trait: 'vane-pass', title: 'vane-pass velocity' };
const AXES: readonly Leaf[] = [
	velocity('H.VEL', 'horizontal', 2.0),
	velocity('V.VEL', 'vertical', 1.6),
	velocity('A.VEL', 'axial', 1.2),
];

/** Gateway B counts velocity in hundredths of an inch per second, as the peak derived from the rms. */
function inchy(leaf: Leaf): Leaf {
	return { ...leaf, unit: '[in_i]/s', detector: 'derived-peak', high: 2.5, scale: 0.01 };
}

function leavesOf(machine: Machine, gateway: Gateway): readonly Leaf[] {
	if (machine.kind === 'steam-trap') {
		return [
			plain('TEMP', 'trap-temperature', 'temperature', 'Cel', [0, 250], 148, 'temperature behind the trap'),
			plain('STATE', 'trap-state', 'state', '1', [0, 2], 0, 'state of the trap'),
		];
	}
	switch (gateway) {
		case 'a':
			return [...AXES, ONCE, SHAKE, IMPACT, PERIODIC, TEMPERATURE, BATTERY, RADIO];
		case 'b':
			return [
				...AXES.map(inchy),
				...(machine.name.startsWith('LL') ? [inchy(VANE)] : []),
				{ ...IMPACT, scale: 0.01 },
				{ ...TEMPERATURE, scale: 0.1 },
				BATTERY,
				plain('AGE', 'age', null, 's', [0, 65_534], 0, 'age of the measurement'),
				plain('VALID', 'valid', 'state', '1', [0, 1], 1, 'the measurement is valid'),
			];
		default:
			return [...AXES, IMPACT, TEMPERATURE];
	}
}

/** How loud this machine runs beside its sisters. */
function temper(machine: Machine): number {
	const size = machine.powerKw === null ? 1 : machine.powerKw > 200 ? 1.15 : machine.powerKw < 60 ? 0.6 : 0.9;
	return size * (0.75 + 0.45 * even('temper', machine.name));
}

const sensed: Signal[] = placed.flatMap(({ machine, point, gateway }) =>
	leavesOf(machine, gateway).map((leaf): Signal => ({
		path: `${machine.name}.${point.name}.${leaf.suffix}`,
		site: machine.site,
		gateway,
		sensor: `${machine.name}.${point.name}`,
		machine: machine.name,
		area: machine.area,
		point: point.name,
		axis: leaf.axis ?? 'none',
		quantity: leaf.quantity,
		unit: leaf.unit,
		detector: leaf.detector,
		low: leaf.low,
		high: leaf.high,
		scale: leaf.scale ?? 1,
		leaf: leaf.suffix.replace('.', '_'),
		periodMs: PERIOD_MS[gateway],
		trait: leaf.trait,
		normal: leaf.quantity === 'velocity' || leaf.trait === 'impact' ? leaf.normal * temper(machine) : leaf.normal,
		title: `${machine.name} ${point.title}, ${leaf.title}`,
	})),
);

function wired(machine: Machine): readonly Leaf[] {
	const power = machine.powerKw ?? 0;
	const speed = machine.speedRpm ?? 0;
	const flow = machine.kind === 'blower' ? 2_400 : machine.area === 'High Lift' ? 1_150 : 1_600;
	const pressure = machine.kind === 'blower' ? 0.6 : machine.area === 'High Lift' ? 7.2 : 1.4;
	return [
		plain('FLOW', 'flow', 'flow', 'm3/h', [0, flow * 1.5], flow, 'flow'),
		plain('PRESS', 'pressure', 'pressure', 'bar', [0, pressure * 2], pressure, 'discharge pressure'),
		plain('POWER', 'power', 'power', 'kW', [0, power * 1.3], power * 0.82, 'electrical power'),
		plain('SPEED', 'speed', 'speed', '{rpm}', [0, speed * 1.2], speed, 'speed'),
		plain('AMP', 'current', 'current', 'A', [0, power * 2.4], power * 1.42, 'motor current'),
		plain('WIND', 'temperature', 'temperature', 'Cel', [0, 180], 78, 'winding temperature'),
	];
}

/** Wired process values of the pump hall, each machine's own and those of the station. */
const process: Signal[] = [
	...MACHINES.filter((machine) => machine.site === 'saltmere').flatMap((machine) =>
		wired(machine).map((leaf): Signal => processSignal(machine.name, machine.area, leaf)),
	),
	...(
		[
			['WELL', 'Low Lift', plain('LEVEL', 'level', 'level', 'm', [0, 6], 3.8, 'wet well level')],
			['TANK', 'High Lift', plain('LEVEL', 'level', 'level', 'm', [0, 8], 5.6, 'service tank level')],
			['MAIN', 'High Lift', plain('PRESS', 'pressure', 'pressure', 'bar', [0, 16], 6.9, 'rising main pressure')],
			['MAIN', 'High Lift', plain('FLOW', 'flow', 'flow', 'm3/h', [0, 9_000], 5_400, 'rising main flow')],
		] as const
	).map(([name, area, leaf]) => ({ ...processSignal(name, area, leaf), machine: null, title: leaf.title })),
];

function processSignal(name: string, area: string, leaf: Leaf): Signal {
	return {
		path: `${name}.${leaf.suffix}`,
		site: 'saltmere',
		gateway: 'broker',
		sensor: null,
		machine: name,
		area,
		point: null,
		axis: 'none',
		quantity: leaf.quantity,
		unit: leaf.unit,
		detector: leaf.detector,
		low: leaf.low,
		high: leaf.high,
		scale: 1,
		leaf: leaf.suffix,
		periodMs: PERIOD_MS.broker,
		trait: leaf.trait,
		normal: leaf.normal,
		title: `${name} ${leaf.title}`,
	};
}

export const SIGNALS: readonly Signal[] = [...sensed, ...process];
