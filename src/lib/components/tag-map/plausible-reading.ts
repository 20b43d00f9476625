// Pure.

/** One way to read a register's bytes. */
export interface PlausibleReading {
	type: string;
	words: string;
	value: number;
}

/** Every common reading of two or four captured bytes, so that a wrong type or word order shows itself. Bytes as hex, blanks allowed. */
export function decodeRegisters(hex: string): PlausibleReading[] {
	const clean = hex.replace(/\s+/g, '');
	if (!/^([0-9a-f]{2}){2,8}$/i.test(clean)) return [];
	const bytes = Uint8Array.from(clean.match(/../g) ?? [], (pair) => parseInt(pair, 16));
	const view = new DataView(bytes.buffer);
	const readings: PlausibleReading[] = [];
	if (bytes.length === 4) {
		const swapped = new DataView(Uint8Array.from([bytes[2]!, bytes[3]!, bytes[0]!, bytes[1]!]).buffer);
		for (const [words, source] of [
			['high word first', view],
			['low word first', swapped],
		] as const) {
			readings.push({ type: 'float32', words, value: source.getFloat32(0) }, { type: 'int32', words, value: source.getInt32(0) });
		}
	}
	if (bytes.length >= 2)
		readings.push(
			{ type: 'uint16', words: bytes.length > 2 ? 'first register' : '', value: view.getUint16(0) },
			{ type: 'int16', words: bytes.length > 2 ? 'first register' : '', value: view.getInt16(0) },
		);
	return readings.filter((reading) => Number.isFinite(reading.value));
}
