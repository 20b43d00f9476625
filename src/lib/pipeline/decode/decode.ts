// Pure.
import type { Address } from '#lib/domain/tag-map/address.ts';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import type { RawScalar } from '#lib/domain/reading.ts';
import type { Reason } from '#lib/domain/reason.ts';
import type { RawInput } from '#lib/pipeline/sources/source.ts';
import { jsonToScalar, plainNumber, pointTo } from './json-value.ts';
import { bytesToHex, decodeRegisters, orderBytes } from './registers.ts';
import { isSentinel } from './sentinel.ts';
import { parseTime } from './time-value.ts';
import { decodeVariant } from './variant.ts';

/** One raw scalar out of what came over the wire, with what the payload itself says of time and quality. */
export interface Decoded {
	raw: RawScalar;
	/** Bytes in hex or the payload's text, as captured. */
	wire: string;
	/** Time inside the payload, milliseconds; null where it has none. */
	embeddedAt: number | null;
	/** True when a time was asked for and could not be read. */
	isTimeUnreadable: boolean;
	/** OPC UA StatusCode inside the payload; null where it has none. */
	embeddedQuality: number | null;
	isSentinel: boolean;
}

/** Longest text of a payload kept for the trace. */
const WIRE_LENGTH = 2_000;
const utf8 = new TextDecoder('utf-8', { fatal: true });

/**
 * Decodes raw input by its address. No scale, no unit.
 * Refusals: 'undecodable', 'path-missing', 'not-a-number-text', with what was found.
 */
export function decode(
	input: RawInput,
	address: Address,
	sentinels: readonly (number | string)[],
): Outcome<Decoded, Reason> & { wire?: string } {
	switch (input.kind) {
		case 'registers': {
			const wire = bytesToHex(input.bytes);
			if (address.kind !== 'modbus') return { ...refuse('undecodable', `registers for a ${address.kind} address`), wire };
			const raw = decodeRegisters(input.bytes, address);
			if (!raw.ok) return { ...raw, wire };
			const sentinel =
				sentinels.length > 0 && isSentinel(raw.value, orderBytes(input.bytes, address.byteOrder, address.wordOrder), sentinels);
			return plain(raw.value, wire, sentinel);
		}
		case 'bit':
			return plain(input.value, input.value ? '1' : '0', isSentinel(input.value ? 1 : 0, null, sentinels));
		case 'variant': {
			const wire = wireOf(input.value, input.dataType);
			const raw = decodeVariant(input.dataType, input.value, address.kind === 'opcua' ? address.indexRange : null);
			return raw.ok ? plain(raw.value, wire, isSentinel(raw.value, null, sentinels)) : { ...raw, wire };
		}
		case 'metric': {
			const wire = wireOf(input.value, `type ${input.dataType}`);
			const raw = decodeVariant('Metric', input.value, null);
			return raw.ok ? plain(raw.value, wire, isSentinel(raw.value, null, sentinels)) : { ...raw, wire };
		}
		case 'payload':
			return decodePayload(input.bytes, address, sentinels);
	}
}

function plain(raw: RawScalar, wire: string, sentinel: boolean): { ok: true; value: Decoded } {
	return ok({ raw, wire, embeddedAt: null, isTimeUnreadable: false, embeddedQuality: null, isSentinel: sentinel });
}

function wireOf(value: unknown, type: string): string {
	const text = typeof value === 'bigint' ? value.toString() : value instanceof Date ? value.toISOString() : String(value);
	return `${text.slice(0, WIRE_LENGTH)} (${type})`;
}

/** One message often carries many tags: its JSON is parsed once, as long as the same bytes come again. */
let lastBytes: Uint8Array | null = null;
let lastText = '';
let lastDocument: { value: unknown } | null = null;

function decodePayload(
	bytes: Uint8Array,
	address: Address,
	sentinels: readonly (number | string)[],
): Outcome<Decoded, Reason> & { wire?: string } {
	if (address.kind !== 'mqtt') return refuse('undecodable', `a payload for a ${address.kind} address`);
	if (lastBytes !== bytes) {
		lastBytes = null;
		lastDocument = null;
		try {
			lastText = utf8.decode(bytes);
		} catch {
			return { ...refuse('undecodable', 'the payload is not UTF-8'), wire: bytesToHex(bytes.subarray(0, 200)) };
		}
		lastBytes = bytes;
	}
	const text = lastText;
	const wire = text.length > WIRE_LENGTH ? `${text.slice(0, WIRE_LENGTH)}…` : text;
	if (!address.valuePointer && !address.timePointer && !address.qualityPointer) {
		const number = plainNumber(text);
		if (number !== null) return plain(number, wire, isSentinel(number, null, sentinels));
		if (/^\s*(true|false)\s*$/.test(text)) return plain(text.trim() === 'true', wire, false);
		return { ...refuse('not-a-number-text', `"${text.slice(0, 60)}" found`), wire };
	}
	if (!lastDocument) {
		try {
			lastDocument = { value: JSON.parse(text) };
		} catch {
			return { ...refuse('undecodable', 'the payload is not JSON'), wire };
		}
	}
	const document = lastDocument.value;
	const raw = jsonToScalar(pointTo(document, address.valuePointer ?? ''));
	if (!raw.ok) return { ...raw, wire };
	let embeddedAt: number | null = null;
	let isTimeUnreadable = false;
	if (address.timePointer) {
		const found = pointTo(document, address.timePointer);
		embeddedAt = found === undefined || found === null ? null : parseTime(found, address.timeFormat);
		isTimeUnreadable = embeddedAt === null && found !== undefined && found !== null;
	}
	const embeddedQuality = address.qualityPointer ? qualityOfJson(pointTo(document, address.qualityPointer)) : null;
	return ok({
		raw: raw.value,
		wire,
		embeddedAt,
		isTimeUnreadable,
		embeddedQuality,
		isSentinel: isSentinel(raw.value, null, sentinels),
	});
}

/**
 * A quality inside a payload: a status code, true for good and false for bad, or the words good, uncertain and bad.
 * A number up to 255 is the classic 8-bit form (0 bad, 64 uncertain, 192 good), above that a status code.
 */
function qualityOfJson(value: unknown): number | null {
	if (typeof value === 'boolean') return value ? 0 : 0x80000000;
	if (typeof value === 'string') {
		const word = value.trim().toLowerCase();
		if (word === 'good' || word === 'ok') return 0;
		if (word === 'uncertain') return 0x40000000;
		if (word === 'bad') return 0x80000000;
		return null;
	}
	if (typeof value !== 'number' || !Number.isInteger(value) || value < 0 || value > 0xffffffff) return null;
	if (value > 255) return value;
	return value >= 192 ? 0 : value >= 64 ? 0x40000000 : 0x80000000;
}
