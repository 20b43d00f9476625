// Pure.
import type { ModbusAddress } from '#lib/domain/tag-map/address.ts';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';

/**
 * The bytes of a Modbus value, most significant first.
 *
 * On the wire a register is two bytes, high byte first [Modbus AP v1.1b3 §4.2]; devices differ beyond that:
 *
 *   value AB CD       wire, word big  byte big     AB CD
 *                     wire, word little byte big   CD AB   ("low word first")
 *                     wire, word big  byte little  BA DC
 *                     wire, both little            DC BA
 */
export function orderBytes(bytes: Uint8Array, byteOrder: 'big' | 'little', wordOrder: 'big' | 'little'): Uint8Array {
	const registers = bytes.length / 2;
	const ordered = new Uint8Array(bytes.length);
	for (let i = 0; i < registers; i += 1) {
		const from = (wordOrder === 'big' ? i : registers - 1 - i) * 2;
		ordered[i * 2] = bytes[byteOrder === 'big' ? from : from + 1] ?? 0;
		ordered[i * 2 + 1] = bytes[byteOrder === 'big' ? from + 1 : from] ?? 0;
	}
	return ordered;
}

/**
 * One raw scalar from the registers of an address. A 64-bit integer that a double cannot hold exactly comes as a bigint.
 * Refusals: 'undecodable' for a wrong number of bytes or a BCD digit above 9.
 */
export function decodeRegisters(bytes: Uint8Array, address: ModbusAddress): Outcome<number | bigint | boolean, 'undecodable'> {
	const { dataType, byteOrder, wordOrder, bit } = address;
	const ordered =
		byteOrder === 'big' && (wordOrder === 'big' || bytes.length === 2) ? bytes : orderBytes(bytes, byteOrder, wordOrder);
	const view = new DataView(ordered.buffer, ordered.byteOffset, ordered.byteLength);
	const wanted = WIDTH[dataType];
	if (ordered.length !== wanted) return refuse('undecodable', `${ordered.length} bytes for a ${dataType}, ${wanted} expected`);
	if (bit !== null) {
		const index = ordered.length - 1 - (bit >> 3);
		const byte = ordered[index];
		if (byte === undefined) return refuse('undecodable', `no bit ${bit} in ${ordered.length} bytes`);
		return ok(((byte >> (bit & 7)) & 1) === 1);
	}
	switch (dataType) {
		case 'bool':
			return ok(view.getUint16(0) !== 0);
		case 'int16':
			return ok(view.getInt16(0));
		case 'uint16':
			return ok(view.getUint16(0));
		case 'int32':
			return ok(view.getInt32(0));
		case 'uint32':
			return ok(view.getUint32(0));
		case 'int64':
			return ok(exact(view.getBigInt64(0)));
		case 'uint64':
			return ok(exact(view.getBigUint64(0)));
		case 'float32':
			return ok(view.getFloat32(0));
		case 'float64':
			return ok(view.getFloat64(0));
		case 'bcd16':
		case 'bcd32':
			return decodeBcd(ordered);
	}
}

const WIDTH: Record<ModbusAddress['dataType'], number> = {
	bool: 2,
	int16: 2,
	uint16: 2,
	int32: 4,
	uint32: 4,
	int64: 8,
	uint64: 8,
	float32: 4,
	float64: 8,
	bcd16: 2,
	bcd32: 4,
};

/** A number where a double holds it exactly, else the bigint itself. */
function exact(value: bigint): number | bigint {
	return value >= -9007199254740991n && value <= 9007199254740991n ? Number(value) : value;
}

/** Binary-coded decimal, two digits a byte, high digit first. Refuses a digit above 9. */
export function decodeBcd(bytes: Uint8Array): Outcome<number, 'undecodable'> {
	let value = 0;
	for (const byte of bytes) {
		const high = byte >> 4;
		const low = byte & 15;
		if (high > 9 || low > 9) return refuse('undecodable', `${byte.toString(16).padStart(2, '0')} is not binary-coded decimal`);
		value = value * 100 + high * 10 + low;
	}
	return ok(value);
}

const HEX = Array.from({ length: 256 }, (_, byte) => byte.toString(16).toUpperCase().padStart(2, '0'));

/** Bytes as people read them: `41 C9 00 00`. */
export function bytesToHex(bytes: Uint8Array): string {
	let text = '';
	for (let i = 0; i < bytes.length; i += 1) text += (i === 0 ? '' : ' ') + HEX[bytes[i] ?? 0];
	return text;
}
