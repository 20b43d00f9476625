// Edge: sources. May touch: node-opcua's types only.
import { type DataValue, DataType, VariantArrayType } from 'node-opcua';
import type { Sample } from '../source.ts';

/** Overflow of a queue: the overflow bit, with info type DataValue [OPC 10000-4 §7.39]; some servers leave the info type out. */
const OVERFLOW = 0x080;
const OVERFLOW_AND_INFO = 0x480;

/** A 64-bit integer comes as [high, low]. */
function toBigint(pair: unknown, isSigned: boolean): bigint {
	const [high = 0, low = 0] = pair as [number, number];
	const value = (BigInt(high >>> 0) << 32n) | BigInt(low >>> 0);
	return isSigned ? BigInt.asIntN(64, value) : value;
}

/** A sample of a data value as it came: value, status, and the source's time, or the server's where the source gives none. */
export function toSample(key: number, dataValue: DataValue, receivedAt: number): Sample {
	const code = dataValue.statusCode.value >>> 0;
	const isOverflow = (code & OVERFLOW) === OVERFLOW;
	const at = dataValue.sourceTimestamp ?? dataValue.serverTimestamp ?? null;
	const { value: variant } = dataValue;
	let raw: Sample['raw'] = null;
	if (variant && variant.dataType !== DataType.Null) {
		const is64 = variant.dataType === DataType.Int64 || variant.dataType === DataType.UInt64;
		const isSigned = variant.dataType === DataType.Int64;
		let value: unknown = variant.value;
		if (is64)
			value =
				variant.arrayType === VariantArrayType.Scalar
					? toBigint(value, isSigned)
					: Array.from(value as ArrayLike<unknown>, (pair) => toBigint(pair, isSigned));
		raw = { kind: 'variant', dataType: DataType[variant.dataType] ?? 'Unknown', value };
	}
	const sourceQuality = isOverflow ? (code & ~OVERFLOW_AND_INFO) >>> 0 : code;
	return {
		key,
		receivedAt,
		sourceAt: at === null ? null : at.getTime(),
		raw,
		sourceQuality,
		fault: null,
		...(isOverflow ? { gapBefore: true } : {}),
	};
}
