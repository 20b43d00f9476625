// Pure.
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import type { Signal } from '../scenario/parts.ts';
import { SIGNALS } from '../scenario/sensors.ts';

/** Namespace of gateway A's OPC UA server. */
export const GATEWAY_A_NAMESPACE = 'urn:saltmere:gateway-a';

/** Node of a value on gateway A, such as `nsu=urn:saltmere:gateway-a;s=HL-1.MDE.H_VEL`. */
export function nodeIdOf(signal: Pick<Signal, 'sensor' | 'leaf'>): string {
	return `nsu=${GATEWAY_A_NAMESPACE};s=${signal.sensor ?? ''}.${signal.leaf}`;
}

export type RegisterPlace = Required<Pick<MapRow, 'unit_id' | 'table' | 'register' | 'data_type' | 'word_order' | 'bit'>> & {
	sentinels: string[] | null;
};

/** Units of the two Modbus devices, by the machine they serve. */
const UNITS: Record<string, number> = { 'HL-3': 4, 'HL-4': 4, 'LL-2': 6, 'LL-3': 7, 'LL-4': 7 };

/** Where each kind of value begins; each unit counts its own on from there. */
const BLOCKS = { float: 100, temperature: 200, impact: 240, battery: 280, age: 320, status: 400 } as const;
type Block = keyof typeof BLOCKS;

function blockOf(signal: Signal): Block {
	switch (signal.trait) {
		case 'temperature':
		case 'trap-temperature':
			return 'temperature';
		case 'impact':
			return 'impact';
		case 'battery':
			return 'battery';
		case 'age':
			return 'age';
		case 'valid':
		case 'trap-state':
			return 'status';
		default:
			return 'float';
	}
}

function unitOf(signal: Signal): number {
	return signal.gateway === 'rtu' ? 1 : (UNITS[signal.machine ?? ''] ?? 1);
}

/**
 * Register of every value on gateway B and on the boiler house line, by path. Velocities are float32, on the units of
 * the low lift with the low word first; temperatures int16 in tenths with 0x8000 for none; validities are bits of one register.
 */
export const REGISTER_PLACES: ReadonlyMap<string, RegisterPlace> = placeAll();

function placeAll(): Map<string, RegisterPlace> {
	const places = new Map<string, RegisterPlace>();
	const next = new Map<string, number>();
	for (const signal of SIGNALS) {
		if (signal.gateway !== 'b' && signal.gateway !== 'rtu') continue;
		const unit = unitOf(signal);
		const block = blockOf(signal);
		const counter = `${signal.gateway} ${unit} ${block}`;
		const index = next.get(counter) ?? 0;
		next.set(counter, index + 1);
		places.set(signal.path, place(signal, unit, block, index));
	}
	return places;
}

function place(signal: Signal, unit: number, block: Block, index: number): RegisterPlace {
	const common = { unit_id: unit, table: 'input-register', word_order: null, bit: null, sentinels: null } as const;
	const register = BLOCKS[block] + index;
	switch (block) {
		case 'float':
			return {
				...common,
				register: BLOCKS.float + 2 * index,
				data_type: 'float32',
				word_order: signal.machine?.startsWith('LL') ? 'little' : 'big',
			};
		case 'temperature':
			return { ...common, register, data_type: 'int16', sentinels: ['0x8000'] };
		case 'status':
			return { ...common, register: BLOCKS.status + Math.floor(index / 16), data_type: 'bool', bit: index % 16 };
		default:
			return { ...common, register, data_type: 'uint16', sentinels: block === 'age' ? ['0xFFFF'] : null };
	}
}
