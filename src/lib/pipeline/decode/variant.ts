// Pure.
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import type { RawScalar } from '#lib/domain/reading.ts';

/**
 * One raw scalar of an OPC UA variant [OPC 10000-6 §5.2.2.16]; `indexRange` picks an element of an array that came whole.
 * Refusals: 'undecodable' for what is no scalar number, boolean, text or time.
 */
export function decodeVariant(dataType: string, value: unknown, indexRange: string | null): Outcome<RawScalar, 'undecodable'> {
	let scalar = value;
	if (Array.isArray(scalar) || ArrayBuffer.isView(scalar)) {
		const list = scalar as ArrayLike<unknown>;
		// The server has cut the range already where it can; one element then stands alone.
		const index = list.length === 1 ? 0 : indexRange !== null && /^\d+$/.test(indexRange) ? Number(indexRange) : -1;
		if (index < 0 || index >= list.length)
			return refuse('undecodable', `an array of ${list.length}; expected one value or an index range`);
		scalar = list[index];
	}
	switch (typeof scalar) {
		case 'number':
		case 'boolean':
			return ok(scalar);
		case 'bigint':
			return ok(scalar >= -9007199254740991n && scalar <= 9007199254740991n ? Number(scalar) : scalar);
		case 'string':
			return dataType === 'String' && /^-?(0|[1-9]\d*)(\.\d+)?([eE][+-]?\d+)?$/.test(scalar.trim())
				? ok(Number(scalar))
				: refuse('undecodable', `text "${scalar.slice(0, 60)}"`);
		default:
			if (scalar instanceof Date) return ok(scalar.getTime());
			return refuse('undecodable', scalar === null || scalar === undefined ? 'no value' : `a ${dataType}`);
	}
}
