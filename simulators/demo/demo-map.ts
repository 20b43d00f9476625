// Pure.
import type { SourceInput } from '#lib/domain/source-settings.ts';
import { modbusSettings, mqttSettings, opcuaSettings } from '#lib/domain/source-settings.ts';
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import { topicOf } from '../mqtt/topic.ts';
import { MACHINES, POINTS, SITES } from '../scenario/layout.ts';
import type { Gateway, Machine, Point, Signal, Site, SiteSlug } from '../scenario/parts.ts';
import { SIGNALS } from '../scenario/sensors.ts';
import { nodeIdOf, REGISTER_PLACES } from './addresses.ts';

export interface DemoSite extends Site {
	machines: readonly Machine[];
	points: readonly Point[];
}

export function demoSites(): DemoSite[] {
	return SITES.map((site) => ({
		...site,
		machines: MACHINES.filter((machine) => machine.site === site.slug),
		points: POINTS.filter((point) => point.site === site.slug),
	}));
}

const SOURCE_NAMES: Partial<Record<Gateway, string>> = {
	a: 'Wireless gateway A',
	b: 'Wireless gateway B',
	broker: 'Pump-hall broker',
	rtu: 'Boiler house line',
};

export interface DemoPorts {
	opcua: number;
	modbus: number;
	rtu: number;
	mqtt: number;
}

/** Sources of both sites. */
export function demoSources(ports: DemoPorts): { site: SiteSlug; source: SourceInput }[] {
	const common = { enabled: true, contact: 'call: electrical duty, ext. 402' };
	return [
		{
			site: 'saltmere',
			source: {
				...common,
				name: 'Wireless gateway A',
				kind: 'opcua',
				notes: 'Panel P2, drawing E-112; 21 sensors, each measures every minute',
				settings: opcuaSettings.parse({ endpoint_url: `opc.tcp://127.0.0.1:${ports.opcua}` }),
			},
		},
		{
			site: 'saltmere',
			source: {
				...common,
				name: 'Wireless gateway B',
				kind: 'modbus',
				notes: 'Panel P4, drawing E-114; sensors measure every ten minutes',
				settings: modbusSettings.parse({ host: '127.0.0.1', port: ports.modbus }),
			},
		},
		{
			site: 'saltmere',
			source: {
				...common,
				name: 'Pump-hall broker',
				kind: 'mqtt',
				notes: 'Wired process values, every 5 s',
				settings: mqttSettings.parse({ url: `mqtt://127.0.0.1:${ports.mqtt}` }),
			},
		},
		{
			site: 'corran',
			source: {
				...common,
				name: 'Boiler house line',
				kind: 'modbus',
				notes: 'Serial line behind a converter',
				settings: modbusSettings.parse({ transport: 'rtu-over-tcp', host: '127.0.0.1', port: ports.rtu }),
			},
		},
	];
}

/** Signals of a site that a demo source brings. */
export function demoSignals(site: SiteSlug): Signal[] {
	return SIGNALS.filter((signal) => signal.site === site && SOURCE_NAMES[signal.gateway] !== undefined);
}

/** The tag map of a site. */
export function demoRows(site: SiteSlug): MapRow[] {
	return demoSignals(site).map((signal) => ({
		tag: signal.path,
		description: signal.title,
		area: signal.area,
		machine: signal.machine,
		point: signal.point,
		axis: signal.axis,
		quantity: signal.quantity,
		source: SOURCE_NAMES[signal.gateway] ?? null,
		...unitsOf(signal),
		...bandOf(signal),
		...timesOf(signal),
		...addressOf(signal),
	}));
}

/** Velocities are kept in mm/s rms, whatever the gateway counts in. */
function unitsOf(signal: Signal): Partial<MapRow> {
	const counted = { scale: signal.scale === 1 ? null : signal.scale };
	if (signal.unit === '[in_i]/s') {
		return {
			...counted,
			raw_unit: signal.unit,
			raw_detector: signal.detector,
			unit: 'mm/s',
			detector: 'rms',
			low_range: 0,
			high_range: 50,
		};
	}
	return {
		...counted,
		unit: signal.unit,
		detector: signal.detector,
		low_range: signal.low,
		high_range: signal.high,
		...(signal.trait === 'valid' ? { states: '0=invalid;1=valid' } : {}),
		...(signal.trait === 'trap-state' ? { states: '0=good;1=blowing through;2=cold' } : {}),
	};
}

function bandOf(signal: Signal): Partial<MapRow> {
	return signal.trait === 'velocity' ? { band_low_hz: 10, band_high_hz: 1_000 } : {};
}

function timesOf(signal: Signal): Partial<MapRow> {
	const seconds = signal.periodMs / 1_000;
	const every = { expected_every_s: seconds, stale_after_s: seconds * 3 };
	switch (signal.gateway) {
		case 'a':
			return { ...every, interval_ms: 1_000 };
		case 'b':
			return signal.trait === 'age' || signal.trait === 'valid'
				? { interval_ms: 10_000 }
				: {
						...every,
						interval_ms: 10_000,
						age_tag: `${signal.sensor ?? ''}.AGE`,
						valid_tag: `${signal.sensor ?? ''}.VALID`,
						valid_when: '=1',
					};
		case 'rtu':
			return { ...every, interval_ms: 10_000 };
		default:
			return { interval_ms: signal.periodMs, deadband: 0 };
	}
}

function addressOf(signal: Signal): Partial<MapRow> {
	switch (signal.gateway) {
		case 'a':
			return { node_id: nodeIdOf(signal) };
		case 'broker':
			return { topic: topicOf(signal), value_pointer: '/value', time_pointer: '/time', time_format: 'rfc3339' };
		default:
			return REGISTER_PLACES.get(signal.path) ?? {};
	}
}
