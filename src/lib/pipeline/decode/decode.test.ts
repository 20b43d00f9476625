import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import {
	ORDERS_OF,
	registersOf,
	type ModbusAddress,
	type ModbusDataType,
	type MqttAddress,
} from '#lib/domain/tag-map/address.ts';
import { decode } from './decode.ts';
import { jsonToScalar, pointTo } from './json-value.ts';
import { plausibleReadings } from './plausible.ts';
import { bytesToHex, decodeRegisters, orderBytes } from './registers.ts';
import { parseRfc3339, parseTime } from './time-value.ts';

const bytes = (hex: string) =>
	Uint8Array.from(
		hex
			.replaceAll(' ', '')
			.match(/../g)
			?.map((pair) => parseInt(pair, 16)) ?? [],
	);
const address = (dataType: ModbusDataType, extra: Partial<ModbusAddress> = {}): ModbusAddress => ({
	kind: 'modbus',
	unitId: 1,
	table: 'holding-register',
	register: 0,
	dataType,
	byteOrder: 'big',
	wordOrder: 'big',
	bit: null,
	...extra,
});
const valueOf = (hex: string, dataType: ModbusDataType, extra: Partial<ModbusAddress> = {}) => {
	const decoded = decodeRegisters(bytes(hex), address(dataType, extra));
	return decoded.ok ? decoded.value : decoded.reason;
};

describe('Modbus registers', () => {
	// Source: IEEE 754 and two's complement, worked by hand; ABCD and CDAB of 123456.0 and -123456 also read back with mbpoll.
	it.each<[string, ModbusDataType, number, string, string, string, string]>([
		['123456.0', 'float32', 123456, '47F12000', '200047F1', 'F1470020', '0020F147'],
		['3.14159', 'float32', Math.fround(3.14159), '40490FD0', '0FD04049', '4940D00F', 'D00F4940'],
		['pi', 'float32', Math.fround(Math.PI), '40490FDB', '0FDB4049', '4940DB0F', 'DB0F4940'],
		['-1.5', 'float32', -1.5, 'BFC00000', '0000BFC0', 'C0BF0000', '0000C0BF'],
		['7.1', 'float32', 7.099999904632568, '40E33333', '333340E3', 'E3403333', '3333E340'],
		['123456789', 'int32', 123456789, '075BCD15', 'CD15075B', '5B0715CD', '15CD5B07'],
		['-123456', 'int32', -123456, 'FFFE1DC0', '1DC0FFFE', 'FEFFC01D', 'C01DFEFF'],
	])('%s as %s is right in all four orders', (_, type, value, abcd, cdab, badc, dcba) => {
		expect(valueOf(abcd, type)).toBe(value);
		expect(valueOf(cdab, type, { wordOrder: 'little' })).toBe(value);
		expect(valueOf(badc, type, { byteOrder: 'little' })).toBe(value);
		expect(valueOf(dcba, type, { byteOrder: 'little', wordOrder: 'little' })).toBe(value);
	});

	it('3.14159 and pi are told apart', () => {
		expect(valueOf('40490FD0', 'float32')).not.toBe(valueOf('40490FDB', 'float32'));
	});

	it.each<[string, string, ModbusDataType, number | bigint | boolean | string]>([
		['a signed register', 'FF83', 'int16', -125],
		['the same bits unsigned', 'FF83', 'uint16', 65411],
		['a double', '400921FB54442D18', 'float64', Math.PI],
		['a 64-bit integer that a double holds', '001FFFFFFFFFFFFF', 'int64', 9007199254740991],
		['a 64-bit integer beyond 2^53', '0020000000000001', 'int64', 9007199254740993n],
		['the least 64-bit integer', '8000000000000000', 'int64', -9223372036854775808n],
		['the greatest unsigned one', 'FFFFFFFFFFFFFFFF', 'uint64', 18446744073709551615n],
		['-1 in 64 bits', 'FFFFFFFFFFFFFFFF', 'int64', -1],
		['decimal digits', '1234', 'bcd16', 1234],
		['eight decimal digits', '12345678', 'bcd32', 12345678],
		['a digit above nine', '12A4', 'bcd16', 'undecodable'],
		['half a value', '47F1', 'float32', 'undecodable'],
	])('decodes %s', (_, hex, type, expected) => {
		expect(valueOf(hex, type)).toBe(expected);
	});

	it('picks a bit after ordering, 0 the least significant', () => {
		expect(valueOf('8001', 'uint16', { bit: 0 })).toBe(true);
		expect(valueOf('8001', 'uint16', { bit: 15 })).toBe(true);
		expect(valueOf('8001', 'uint16', { bit: 1 })).toBe(false);
		expect(valueOf('0001 8000', 'uint32', { bit: 1, wordOrder: 'little' })).toBe(false);
		expect(valueOf('0001 8000', 'uint32', { bit: 31, wordOrder: 'little' })).toBe(true);
	});

	it('ordering twice gives the bytes back, whatever the order', () => {
		fc.assert(
			fc.property(
				fc.constantFrom(2, 4, 8),
				fc.infiniteStream(fc.nat(255)),
				fc.constantFrom(...ORDERS_OF),
				(size, stream, { byteOrder, wordOrder }) => {
					const given = Uint8Array.from([...stream.take(size)]);
					expect(orderBytes(orderBytes(given, byteOrder, wordOrder), byteOrder, wordOrder)).toEqual(given);
				},
			),
		);
	});

	it('takes a sentinel by its number and by its bit pattern, on the ordered bytes', () => {
		const isSentinel = (
			hex: string,
			type: ModbusDataType,
			sentinels: (number | string)[],
			extra: Partial<ModbusAddress> = {},
		) => {
			const decoded = decode({ kind: 'registers', bytes: bytes(hex) }, address(type, extra), sentinels);
			return decoded.ok && decoded.value.isSentinel;
		};
		expect(isSentinel('8000', 'int16', ['0x8000'])).toBe(true);
		expect(isSentinel('8000', 'int16', [-32768])).toBe(true);
		expect(isSentinel('FFFF', 'uint16', [65535])).toBe(true);
		expect(isSentinel('7FFF', 'int16', ['0x7FFF'])).toBe(true);
		expect(isSentinel('0000 8000', 'int32', ['0x80000000'], { wordOrder: 'little' })).toBe(true);
		expect(isSentinel('7FC00000', 'float32', ['0x7FC00000'])).toBe(true);
		expect(isSentinel('0080', 'int16', ['0x8000'])).toBe(false);
	});

	it('keeps the bytes as captured', () => {
		const decoded = decode({ kind: 'registers', bytes: bytes('41C90000') }, address('float32'), []);
		expect(decoded).toMatchObject({ ok: true, value: { raw: 25.125, wire: '41 C9 00 00' } });
		expect(bytesToHex(bytes('000AFF'))).toBe('00 0A FF');
	});

	it('offers every plausible reading of registers, those in range first', () => {
		const offered = plausibleReadings(bytes('41C90000'), { low: 0, high: 50, scale: 0.01, offset: 0 });
		expect(offered[0]?.fits).toBe(true);
		expect(offered.some((one) => one.dataType === 'float32' && one.wordOrder === 'big' && one.value === 25.125 && one.fits)).toBe(
			true,
		);
		expect(offered.every((one) => registersOf(one.dataType) <= 2)).toBe(true);
	});
});

describe('JSON payloads', () => {
	const topic = (extra: Partial<MqttAddress> = {}): MqttAddress => ({
		kind: 'mqtt',
		topic: 't',
		valuePointer: '/v',
		timePointer: null,
		qualityPointer: null,
		timeFormat: 'auto',
		...extra,
	});
	const read = (text: string | Uint8Array, at: MqttAddress = topic()) =>
		decode({ kind: 'payload', bytes: typeof text === 'string' ? new TextEncoder().encode(text) : text }, at, []);

	// Source: RFC 6901 §5.
	const document = { foo: ['bar', 'baz'], '': 0, 'a/b': 1, 'c%d': 2, 'e^f': 3, 'g|h': 4, 'i\\j': 5, 'k"l': 6, ' ': 7, 'm~n': 8 };
	it.each([
		['', document],
		['/foo', ['bar', 'baz']],
		['/foo/0', 'bar'],
		['/', 0],
		['/a~1b', 1],
		['/c%d', 2],
		['/e^f', 3],
		['/g|h', 4],
		['/i\\j', 5],
		['/k"l', 6],
		['/ ', 7],
		['/m~0n', 8],
		['/foo/01', undefined],
		['/foo/-', undefined],
		['/nothing', undefined],
		['/foo/0/x', undefined],
		['/constructor', undefined],
	])('pointer "%s"', (pointer, expected) => {
		expect(pointTo(document, pointer)).toEqual(expected);
	});

	it.each<[string, string, unknown]>([
		['a number', '{"v":1.5}', 1.5],
		['text that is a number by JSON’s grammar', '{"v":"-1.5e3"}', -1500],
		['a whole number beyond 2^53 in text', '{"v":"9007199254740993"}', 9007199254740993n],
		['true', '{"v":true}', true],
		['a decimal comma', '{"v":"1,5"}', 'not-a-number-text'],
		['hexadecimal text', '{"v":"0x10"}', 'not-a-number-text'],
		['NaN as text', '{"v":"NaN"}', 'not-a-number-text'],
		['empty text', '{"v":""}', 'not-a-number-text'],
		['a list', '{"v":[1]}', 'not-a-number-text'],
		['null', '{"v":null}', 'path-missing'],
		['a missing path', '{"w":1}', 'path-missing'],
		['what is not JSON', '{"v":NaN}', 'undecodable'],
	])('%s', (_, text, expected) => {
		const decoded = read(text);
		expect(decoded.ok ? decoded.value.raw : decoded.reason).toBe(expected);
	});

	it('refuses bytes that are not UTF-8', () => {
		expect(read(Uint8Array.of(0x7b, 0xff))).toMatchObject({ ok: false, reason: 'undecodable' });
	});

	it('takes a plain payload as the number itself', () => {
		expect(read(' 12.5\n', topic({ valuePointer: null }))).toMatchObject({ ok: true, value: { raw: 12.5 } });
		expect(read('12,5', topic({ valuePointer: null }))).toMatchObject({ ok: false, reason: 'not-a-number-text' });
	});

	it('reads time and quality where the payload carries them', () => {
		const decoded = read('{"v":1,"t":"2026-12-01T12:00:00.1239Z","q":64}', topic({ timePointer: '/t', qualityPointer: '/q' }));
		expect(decoded).toMatchObject({
			ok: true,
			value: { embeddedAt: Date.UTC(2026, 11, 1, 12, 0, 0, 123), embeddedQuality: 0x40000000 },
		});
		expect(read('{"v":1,"t":"yesterday"}', topic({ timePointer: '/t' }))).toMatchObject({
			ok: true,
			value: { embeddedAt: null, isTimeUnreadable: true },
		});
	});

	it('tells text, objects and nothing apart', () => {
		expect(jsonToScalar({})).toMatchObject({ ok: false, reason: 'not-a-number-text' });
		expect(jsonToScalar(undefined)).toMatchObject({ ok: false, reason: 'path-missing' });
	});
});

describe('times', () => {
	// Source: RFC 3339 §5.8.
	it.each([
		['1985-04-12T23:20:50.52Z', Date.UTC(1985, 3, 12, 23, 20, 50, 520)],
		['1996-12-19T16:39:57-08:00', Date.UTC(1996, 11, 20, 0, 39, 57)],
		['1990-12-31T23:59:60Z', Date.UTC(1990, 11, 31, 23, 59, 59, 999)],
		['1937-01-01T12:00:27.87+00:20', Date.UTC(1937, 0, 1, 11, 40, 27, 870)],
		['2026-12-01T12:00:00', null],
		['2026-02-30T12:00:00Z', null],
		['2026-12-01T24:00:00Z', null],
	])('%s', (text, expected) => {
		expect(parseRfc3339(text)).toBe(expected);
	});

	it('the same instant in six forms', () => {
		const at = Date.UTC(2026, 11, 1, 12, 0, 0, 250);
		for (const form of [at / 1_000, at, at * 1_000, `${at}`, '2026-12-01T12:00:00.250Z', '2026-12-01T13:00:00.250+01:00'])
			expect(parseTime(form, 'auto')).toBe(at);
		expect(parseTime(1_796_126_400_250_000_000, 'ns')).toBe(1_796_126_400_250);
		expect(parseTime('2026-12-01T12:00:00Z', 'ms')).toBeNull();
	});
});

describe('OPC UA variants', () => {
	const at = { kind: 'opcua', nodeId: 'i=1', indexRange: null } as const;
	it.each<[string, string, unknown, string | null, unknown]>([
		['a double', 'Double', 1.5, null, 1.5],
		['a boolean', 'Boolean', true, null, true],
		['a 64-bit integer beyond 2^53', 'Int64', 9007199254740993n, null, 9007199254740993n],
		['-1 as a 64-bit integer', 'Int64', -1n, null, -1],
		['one element of an array', 'Double', [1, 2, 3], '1', 2],
		['an array without an index range', 'Double', [1, 2], null, 'undecodable'],
		['text that is no number', 'String', 'open', null, 'undecodable'],
		['nothing', 'Null', null, null, 'undecodable'],
	])('%s', (_, dataType, value, indexRange, expected) => {
		const decoded = decode({ kind: 'variant', dataType, value }, { ...at, indexRange }, []);
		expect(decoded.ok ? decoded.value.raw : decoded.reason).toBe(expected);
	});
});
