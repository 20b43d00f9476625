// Pure.
/**
 * Layout of a journal row's readings, columns one after another, little-endian:
 *
 *   byte 0      1     version
 *   byte 1..3         zero, so that the columns lie on multiples of four
 *   byte 4..7   n     count, uint32
 *   then        n × int32    tag id
 *               n × float64  at, milliseconds since the epoch, UTC
 *               n × float64  value (0 where flag 2 says there is none)
 *               n × uint32   quality, StatusCode
 *               n × uint8    flags: 1 time is the hub's, 2 no value, 4 test value
 */
export interface JournalReading {
	tagId: number;
	at: number;
	value: number | null;
	quality: number;
	isHubTime: boolean;
	isTest: boolean;
}

const VERSION = 1;
const HEADER = 8;
const ROW = 4 + 8 + 8 + 4 + 1;
const HUB_TIME = 1;
const NO_VALUE = 2;
const TEST = 4;

/** Packs readings in their order. */
export function packReadings(readings: readonly JournalReading[]): Buffer {
	const n = readings.length;
	const buffer = Buffer.alloc(HEADER + n * ROW);
	buffer[0] = VERSION;
	buffer.writeUInt32LE(n, 4);
	const view = new DataView(buffer.buffer, buffer.byteOffset, buffer.byteLength);
	const [ids, ats, values, qualities, flags] = columns(n);
	for (let i = 0; i < n; i += 1) {
		const reading = readings[i];
		if (!reading) continue;
		view.setInt32(ids + i * 4, reading.tagId, true);
		view.setFloat64(ats + i * 8, reading.at, true);
		view.setFloat64(values + i * 8, reading.value ?? 0, true);
		view.setUint32(qualities + i * 4, reading.quality >>> 0, true);
		view.setUint8(
			flags + i,
			(reading.isHubTime ? HUB_TIME : 0) | (reading.value === null ? NO_VALUE : 0) | (reading.isTest ? TEST : 0),
		);
	}
	return buffer;
}

function columns(n: number): [number, number, number, number, number] {
	const ats = HEADER + n * 4;
	const values = ats + n * 8;
	const qualities = values + n * 8;
	return [HEADER, ats, values, qualities, qualities + n * 4];
}

/** How many readings a packed row holds. Throws for a version it does not know. */
export function countPacked(buffer: Buffer): number {
	if (buffer[0] !== VERSION) throw new Error(`journal row of version ${buffer[0]}, ${VERSION} expected`);
	return buffer.readUInt32LE(4);
}

/** The tags that a packed row speaks of. */
export function listPackedTags(buffer: Buffer): Set<number> {
	const n = countPacked(buffer);
	const ids = new Set<number>();
	for (let i = 0; i < n; i += 1) ids.add(buffer.readInt32LE(HEADER + i * 4));
	return ids;
}

/** Reads packed readings from index `from` on, calling `visit` for each. */
export function visitPacked(
	buffer: Buffer,
	from: number,
	visit: (
		tagId: number,
		at: number,
		value: number | null,
		quality: number,
		flags: { isHubTime: boolean; isTest: boolean },
		index: number,
	) => boolean | void,
): void {
	const n = countPacked(buffer);
	const view = new DataView(buffer.buffer, buffer.byteOffset, buffer.byteLength);
	const [ids, ats, values, qualities, flagsAt] = columns(n);
	for (let i = Math.max(0, from); i < n; i += 1) {
		const flags = view.getUint8(flagsAt + i);
		const stop = visit(
			view.getInt32(ids + i * 4, true),
			view.getFloat64(ats + i * 8, true),
			flags & NO_VALUE ? null : view.getFloat64(values + i * 8, true),
			view.getUint32(qualities + i * 4, true),
			FLAGS[flags & (HUB_TIME | TEST)] ?? { isHubTime: false, isTest: false },
			i,
		);
		if (stop === true) return;
	}
}

const FLAGS: Readonly<Record<number, { isHubTime: boolean; isTest: boolean }>> = {
	0: { isHubTime: false, isTest: false },
	1: { isHubTime: true, isTest: false },
	4: { isHubTime: false, isTest: true },
	5: { isHubTime: true, isTest: true },
};
