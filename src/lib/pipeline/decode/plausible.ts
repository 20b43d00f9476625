// Pure.
import {
	MODBUS_DATA_TYPES,
	ORDERS_OF,
	registersOf,
	type ModbusAddress,
	type ModbusDataType,
} from '#lib/domain/tag-map/address.ts';
import { decodeRegisters } from './registers.ts';

/** One way to read the same registers. */
export interface Reading {
	dataType: ModbusDataType;
	byteOrder: 'big' | 'little';
	wordOrder: 'big' | 'little';
	value: number | bigint | boolean;
	/** Within the range that the row expects; null where it has none. */
	fits: boolean | null;
}

/** Every decoding of the given registers that gives a finite number, those that fit the range first; for the helper beside the grid. */
export function plausibleReadings(
	bytes: Uint8Array,
	range: { low: number | null; high: number | null; scale: number; offset: number },
): Reading[] {
	const readings: Reading[] = [];
	for (const dataType of MODBUS_DATA_TYPES) {
		if (dataType === 'bool') continue;
		const width = registersOf(dataType) * 2;
		if (bytes.length < width) continue;
		for (const { byteOrder, wordOrder } of ORDERS_OF) {
			if (width === 2 && wordOrder === 'little') continue;
			const address: ModbusAddress = {
				kind: 'modbus',
				unitId: 0,
				table: 'input-register',
				register: 0,
				dataType,
				byteOrder,
				wordOrder,
				bit: null,
			};
			const decoded = decodeRegisters(bytes.subarray(0, width), address);
			if (!decoded.ok) continue;
			const { value } = decoded;
			if (typeof value === 'number' && (!Number.isFinite(value) || (value !== 0 && Math.abs(value) < 1e-30))) continue;
			const scaled = Number(value) * range.scale + range.offset;
			const fits =
				range.low === null && range.high === null
					? null
					: scaled >= (range.low ?? -Infinity) && scaled <= (range.high ?? Infinity);
			readings.push({ dataType, byteOrder, wordOrder, value, fits });
		}
	}
	return readings.sort((a, b) => Number(b.fits ?? false) - Number(a.fits ?? false));
}
