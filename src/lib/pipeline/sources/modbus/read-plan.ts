// Pure.
import { registersOf, type ModbusAddress } from '#lib/domain/tag-map/address.ts';

/** A function 03/04 request may ask for at most 125 registers [Modbus AP v1.1b3 §6.3, §6.4]. */
export const MAX_REGISTERS_PER_READ = 125;
/** A function 01/02 request may ask for at most 2,000 bits [Modbus AP v1.1b3 §6.1, §6.2]. */
export const MAX_BITS_PER_READ = 2_000;

export type Table = ModbusAddress['table'];

/** Registers (or bits) that a device refuses: nothing is read over them. */
export interface Hole {
	unitId: number;
	table: Table;
	/** First and one past the last, as on the wire. */
	from: number;
	to: number;
}

/** One address with the key that its samples carry. */
export interface KeyedAddress {
	key: number;
	address: ModbusAddress;
}

/** One request: a unit, a table, and the addresses that its answer holds. */
export interface ReadBlock {
	unitId: number;
	table: Table;
	start: number;
	count: number;
	items: KeyedAddress[];
}

/** How many registers or bits an address takes. */
export function widthOf(address: ModbusAddress): number {
	return isBitTable(address.table) ? 1 : registersOf(address.dataType);
}

export function isBitTable(table: Table): boolean {
	return table === 'coil' || table === 'discrete-input';
}

/**
 * Fewest reads that cover the addresses: one unit and table each, at most `maxRegisters` (or 2,000 bits) long, never over a known hole and never
 * through the middle of a value. Registers between two wanted ones are read over where that saves a request.
 *
 * Source: covering points by intervals of fixed length from the left is optimal; holes only cut the line into pieces that are covered one by one.
 */
export function planReads(
	addresses: readonly KeyedAddress[],
	holes: readonly Hole[],
	maxRegisters = MAX_REGISTERS_PER_READ,
): ReadBlock[] {
	const groups = new Map<string, KeyedAddress[]>();
	for (const item of addresses) {
		const key = `${item.address.unitId}|${item.address.table}`;
		const group = groups.get(key);
		if (group) group.push(item);
		else groups.set(key, [item]);
	}
	const blocks: ReadBlock[] = [];
	for (const group of groups.values()) {
		const { unitId, table } = group[0]?.address ?? { unitId: 0, table: 'input-register' as const };
		const most = isBitTable(table) ? MAX_BITS_PER_READ : Math.max(1, Math.min(maxRegisters, MAX_REGISTERS_PER_READ));
		const own = holes.filter((hole) => hole.unitId === unitId && hole.table === table).sort((a, b) => a.from - b.from);
		const sorted = [...group].sort((a, b) => a.address.register - b.address.register || widthOf(a.address) - widthOf(b.address));
		let block: ReadBlock | null = null;
		for (const item of sorted) {
			const start = item.address.register;
			const end = start + widthOf(item.address);
			const blockEnd: number = block ? block.start + block.count : 0;
			const fits: boolean =
				block !== null &&
				Math.max(end, blockEnd) - block.start <= most &&
				!crossesHole(own, blockEnd, Math.max(end, blockEnd)) &&
				!crossesHole(own, start, end);
			if (block && fits) {
				block.count = Math.max(end, blockEnd) - block.start;
				block.items.push(item);
			} else {
				block = { unitId, table, start, count: end - start, items: [item] };
				blocks.push(block);
			}
		}
	}
	return blocks;
}

/** True when [from, to) touches a hole. */
function crossesHole(holes: readonly Hole[], from: number, to: number): boolean {
	return to > from && holes.some((hole) => hole.from < to && from < hole.to);
}

/** The addresses whose own registers a hole takes; they are asked alone and rarely. */
export function inHole(address: ModbusAddress, holes: readonly Hole[]): boolean {
	const end = address.register + widthOf(address);
	return holes.some(
		(hole) => hole.unitId === address.unitId && hole.table === address.table && hole.from < end && address.register < hole.to,
	);
}
