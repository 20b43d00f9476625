// Pure.
import { registersOf, type ModbusAddress, type ModbusDataType } from '#lib/domain/tag-map/address.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import type { OtherDecoding } from '#lib/domain/trace.ts';
import { plausibleReadings } from '#lib/pipeline/decode/plausible.ts';
import { orderBytes } from '#lib/pipeline/decode/registers.ts';

/**
 * The other ways to read the registers of a value, each carried on by the tag's own scale and conversion, so that a receiver that
 * reads them with another type, sign, word or byte order is found out. Empty for other sources and for a single bit.
 * Bytes that were not kept are rebuilt from the raw number. Units: raw as decoded, `scaled` in the raw unit, `value` in the tag's.
 */
export function otherDecodings(wire: string | null, raw: number | null, plan: TagPlan): OtherDecoding[] {
	const { address } = plan;
	if (address.kind !== 'modbus' || address.bit !== null || address.dataType === 'bool') return [];
	const bytes = wire === null ? (raw === null ? null : bytesOf(raw, address)) : bytesFromHex(wire);
	if (bytes === null || bytes.length === 0) return [];
	const seen = new Set<string>();
	const found: OtherDecoding[] = [];
	for (const reading of plausibleReadings(bytes, { low: null, high: null, scale: 1, offset: 0 })) {
		const number = Number(reading.value);
		const words = wordsOf(reading, bytes.length, address);
		if (words === null || seen.has(words) || !Number.isFinite(number)) continue;
		seen.add(words);
		const scaled = number * plan.scale + plan.offset;
		found.push({ words, raw: number, scaled, value: scaled * plan.conversion.factor + plan.conversion.offset });
	}
	return found;
}

/** What differs from the tag's own way, in words; null where nothing does. */
function wordsOf(
	reading: { dataType: ModbusDataType; byteOrder: string; wordOrder: string },
	size: number,
	own: ModbusAddress,
): string | null {
	const isOneRegister = registersOf(reading.dataType) === 1;
	const isOther = [
		reading.dataType !== own.dataType ? reading.dataType : null,
		!isOneRegister && reading.wordOrder !== own.wordOrder ? `${reading.wordOrder === 'big' ? 'high' : 'low'} word first` : null,
		reading.byteOrder !== own.byteOrder ? (reading.byteOrder === 'big' ? 'bytes not swapped' : 'bytes swapped') : null,
		isOneRegister && size > 2 ? 'first register only' : null,
	].filter((word) => word !== null);
	return isOther.length === 0 ? null : isOther.join(', ');
}

function bytesFromHex(text: string): Uint8Array | null {
	const clean = text.replace(/\s+/g, '');
	return /^([0-9a-f]{2})+$/i.test(clean) ? Uint8Array.from(clean.match(/../g) ?? [], (pair) => parseInt(pair, 16)) : null;
}

/** The bytes on the wire that give a raw number; null for types whose numbers a double does not hold. */
function bytesOf(raw: number, address: ModbusAddress): Uint8Array | null {
	const view = new DataView(new ArrayBuffer(registersOf(address.dataType) * 2));
	switch (address.dataType) {
		case 'int16':
			view.setInt16(0, raw);
			break;
		case 'uint16':
			view.setUint16(0, raw);
			break;
		case 'int32':
			view.setInt32(0, raw);
			break;
		case 'uint32':
			view.setUint32(0, raw);
			break;
		case 'float32':
			view.setFloat32(0, raw);
			break;
		case 'float64':
			view.setFloat64(0, raw);
			break;
		default:
			return null;
	}
	// Ordering is its own inverse: it turns registers and bytes round, or leaves them.
	return orderBytes(new Uint8Array(view.buffer), address.byteOrder, address.wordOrder);
}
