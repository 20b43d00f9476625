// Pure.
import type { Fault, Sample } from '../source.ts';
import { isBitTable, widthOf, type ReadBlock } from './read-plan.ts';

/** Where each address of a block lies in its answer: bits by number, registers by byte; worked out once a plan. */
const cuts = new WeakMap<ReadBlock, { from: number; to: number }[]>();

function cutsOf(block: ReadBlock): { from: number; to: number }[] {
	const known = cuts.get(block);
	if (known) return known;
	const made = block.items.map(({ address }) => {
		const offset = address.register - block.start;
		return isBitTable(block.table) ? { from: offset, to: offset + 1 } : { from: offset * 2, to: (offset + widthOf(address)) * 2 };
	});
	cuts.set(block, made);
	return made;
}

/** Cuts a block's answer into its addresses' own bytes. */
export function samplesOf(block: ReadBlock, bytes: Uint8Array, receivedAt: number, latencyMs: number): Sample[] {
	const isBits = isBitTable(block.table);
	const places = cutsOf(block);
	return block.items.map(({ key }, index) => {
		const { from, to } = places[index] ?? { from: 0, to: 0 };
		return {
			key,
			receivedAt,
			sourceAt: null,
			raw: isBits
				? { kind: 'bit', value: (((bytes[from >> 3] ?? 0) >> (from & 7)) & 1) === 1 }
				: { kind: 'registers', bytes: new Uint8Array(bytes.buffer, bytes.byteOffset + from, to - from) },
			sourceQuality: null,
			fault: null,
			latencyMs,
		};
	});
}

/** Why a block's addresses have no value. */
export function faultsOf(block: ReadBlock, fault: Fault, receivedAt: number): Sample[] {
	return block.items.map(({ key }) => ({ key, receivedAt, sourceAt: null, raw: null, sourceQuality: null, fault }));
}
