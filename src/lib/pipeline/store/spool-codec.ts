// Edge: store. May touch: Node's own serializer and zlib; nothing outside the process.
import { deserialize, serialize } from 'node:v8';
import { deflateSync, inflateSync } from 'node:zlib';
import type { Reason } from '#lib/domain/reason.ts';
import type { RawScalar, TestReading } from '#lib/domain/reading.ts';
import type { StoredReading } from './write-batch.ts';

/** What one row of the spool holds packed. */
export interface PackedReadings {
	readings: readonly StoredReading[];
	testReadings: readonly (TestReading & { siteId: number })[];
}

/** Version byte in front; then deflate, whose checksum tells a spoiled row; then columns in the form of structured clone. */
const VERSION = 1;
const FAST = { level: 1 } as const;

interface Columns {
	tagId: Int32Array;
	siteId: Int32Array;
	at: Float64Array;
	/** NaN where there is none: a stored value is never NaN. */
	value: Float64Array;
	quality: Uint32Array;
	isHubTime: Uint8Array;
	receivedAt: Float64Array;
	/** NaN where there is none. */
	sourceAt: Float64Array;
	revision: Int32Array;
	reason: (Reason | null)[];
	raw: RawScalar[];
	rawKept: (string | null)[];
	wire: (string | null)[];
	test: PackedReadings['testReadings'];
}

/** Packs readings in their order. */
export function packForSpool({ readings, testReadings }: PackedReadings): Buffer {
	const n = readings.length;
	const columns: Columns = {
		tagId: new Int32Array(n),
		siteId: new Int32Array(n),
		at: new Float64Array(n),
		value: new Float64Array(n),
		quality: new Uint32Array(n),
		isHubTime: new Uint8Array(n),
		receivedAt: new Float64Array(n),
		sourceAt: new Float64Array(n),
		revision: new Int32Array(n),
		reason: [],
		raw: [],
		rawKept: [],
		wire: [],
		test: testReadings,
	};
	for (const [i, reading] of readings.entries()) {
		columns.tagId[i] = reading.tagId;
		columns.siteId[i] = reading.siteId;
		columns.at[i] = reading.at;
		columns.value[i] = reading.value ?? Number.NaN;
		columns.quality[i] = reading.quality;
		columns.isHubTime[i] = reading.timeFrom === 'hub' ? 1 : 0;
		columns.receivedAt[i] = reading.receivedAt;
		columns.sourceAt[i] = reading.sourceAt ?? Number.NaN;
		columns.revision[i] = reading.revision;
		columns.reason.push(reading.reason);
		columns.raw.push(reading.raw);
		columns.rawKept.push(reading.rawKept);
		columns.wire.push(reading.wire);
	}
	return Buffer.concat([Buffer.of(VERSION), deflateSync(serialize(columns), FAST)]);
}

/** Reads a packed row. Throws for a version that it does not know and for a spoiled row. */
export function unpackFromSpool(packed: Uint8Array): PackedReadings {
	if (packed[0] !== VERSION) throw new Error(`spool row of version ${packed[0]}, ${VERSION} expected`);
	const columns = deserialize(inflateSync(packed.subarray(1))) as Columns;
	const numberAt = (column: ArrayLike<number>, i: number) => column[i] ?? 0;
	const orNull = (value: number) => (Number.isNaN(value) ? null : value);
	const readings = columns.raw.map((raw, i): StoredReading => ({
		tagId: numberAt(columns.tagId, i),
		siteId: numberAt(columns.siteId, i),
		at: numberAt(columns.at, i),
		value: orNull(numberAt(columns.value, i)),
		quality: numberAt(columns.quality, i),
		timeFrom: columns.isHubTime[i] ? 'hub' : 'source',
		receivedAt: numberAt(columns.receivedAt, i),
		sourceAt: orNull(numberAt(columns.sourceAt, i)),
		revision: numberAt(columns.revision, i),
		reason: columns.reason[i] ?? null,
		raw,
		rawKept: columns.rawKept[i] ?? null,
		wire: columns.wire[i] ?? null,
	}));
	return { readings, testReadings: columns.test };
}
