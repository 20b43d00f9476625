// Pure.
/** CRC-16/MODBUS: polynomial A001 reflected, begun with FFFF, sent low byte first [Modbus over serial line v1.02 §6.2.2]. */
export function crc16(bytes: Uint8Array): number {
	let crc = 0xffff;
	for (const byte of bytes) {
		crc ^= byte;
		for (let bit = 0; bit < 8; bit += 1) crc = crc & 1 ? (crc >>> 1) ^ 0xa001 : crc >>> 1;
	}
	return crc;
}
