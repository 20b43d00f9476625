import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { qualityJson, STATUS_CODES } from '#lib/domain/quality.ts';
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import type { Fault, Sample } from '#lib/pipeline/sources/source.ts';
import { compileRow } from './compile-row.ts';
import { percentDeadband, shouldStore, type LastStored } from './deadband.ts';
import { measuredAt } from './measured-at.ts';
import { normalize, type NormalizeContext } from './normalize.ts';
import { rawToStore } from './raw-to-store.ts';

const NOW = Date.UTC(2026, 11, 1, 12, 0, 0);

function plan(extra: Partial<MapRow> = {}, rest: Partial<TagPlan> = {}): TagPlan {
	const compiled = compileRow(
		{
			tag: 'HL-3.MDE.H.VEL',
			unit_id: 4,
			table: 'input-register',
			register: 100,
			data_type: 'float32',
			unit: 'mm/s',
			detector: 'rms',
			raw_unit: '[in_i]/s',
			raw_detector: 'derived-peak',
			scale: 0.01,
			...extra,
			id: 7,
		},
		{
			siteId: 1,
			sourceId: 's',
			sourceKind: 'modbus',
			mqttPayload: null,
			timePolicy: 'source',
			revision: 17,
			limits: [],
			tagIdByName: () => 8,
		},
	);
	if (!compiled.ok) throw new Error(compiled.detail);
	return { ...compiled.value, ...rest };
}
const sample = (hex: string | null, extra: Partial<Sample> = {}): Sample => ({
	key: 7,
	receivedAt: NOW,
	sourceAt: null,
	raw:
		hex === null
			? null
			: { kind: 'registers', bytes: Uint8Array.from(hex.match(/../g)?.map((pair) => parseInt(pair, 16)) ?? []) },
	sourceQuality: null,
	fault: null,
	...extra,
});
const context = (extra: Partial<NormalizeContext> = {}): NormalizeContext => ({
	now: NOW,
	rawEdge: NOW - 400 * 86_400_000,
	futureMs: 300_000,
	companion: () => undefined,
	unchangedSince: null,
	...extra,
});
const named = (reading: { quality: number; reason: unknown; value: number | null }) => [
	qualityJson(reading.quality).name,
	reading.reason,
	reading.value,
];

describe('normalize', () => {
	it('is convert(raw × scale + offset): 41 C9 00 00 is 25.125, × 0.01 in/s derived peak, 4.512579 mm/s rms [worked by hand]', () => {
		const reading = normalize(sample('41C90000'), plan(), context());
		expect(reading).toMatchObject({
			raw: 25.125,
			wire: '41 C9 00 00',
			quality: 0,
			reason: null,
			revision: 17,
			timeFrom: 'hub',
			at: NOW,
		});
		expect(reading.value).toBeCloseTo(4.512579, 6);
	});

	it.each<[string, Fault, string, string]>([
		['no answer', { code: 'no-answer' }, 'BadCommunicationError', 'no-answer'],
		['no connection', { code: 'no-connection' }, 'BadNoCommunication', 'no-connection'],
		['a source that is offline', { code: 'source-offline' }, 'BadNoCommunication', 'source-offline'],
		['exception 1', { code: 'exception', exception: 1 }, 'BadConfigurationError', 'exception-1'],
		['exception 2', { code: 'exception', exception: 2 }, 'BadConfigurationError', 'exception-2'],
		['exception 3', { code: 'exception', exception: 3 }, 'BadConfigurationError', 'exception-3'],
		['exception 4', { code: 'exception', exception: 4 }, 'BadDeviceFailure', 'exception-4'],
		['exception 8', { code: 'exception', exception: 8 }, 'BadDeviceFailure', 'exception-8'],
		['exception 5', { code: 'exception', exception: 5 }, 'BadNoCommunication', 'exception-5'],
		['exception 6', { code: 'exception', exception: 6 }, 'BadNoCommunication', 'exception-6'],
		['exception 10', { code: 'exception', exception: 10 }, 'BadNoCommunication', 'exception-10'],
		['exception 11', { code: 'exception', exception: 11 }, 'BadNoCommunication', 'exception-11'],
		['an undecodable payload', { code: 'undecodable' }, 'BadDecodingError', 'undecodable'],
	])('%s', (_, fault, name, reason) => {
		expect(named(normalize(sample(null, { fault }), plan(), context()))).toEqual([name, reason, null]);
	});

	it('passes on what the source says of a value', () => {
		expect(named(normalize(sample('41C90000', { sourceQuality: STATUS_CODES.BadOutOfService }), plan(), context()))).toEqual([
			'BadOutOfService',
			'source-bad',
			null,
		]);
		expect(
			normalize(sample('41C90000', { sourceQuality: STATUS_CODES.UncertainSensorNotAccurate }), plan(), context()),
		).toMatchObject({ quality: STATUS_CODES.UncertainSensorNotAccurate, value: expect.any(Number) });
	});

	it.each<[string, string, Partial<MapRow>, string, string]>([
		['a sentinel', '8000', { data_type: 'int16', sentinels: ['0x8000'] }, 'BadSensorFailure', 'sentinel'],
		['a quiet NaN', '7FC00000', {}, 'BadSensorFailure', 'nan'],
		['infinity', '7F800000', {}, 'BadSensorFailure', 'infinite'],
		['half a value', '41C9', {}, 'BadDecodingError', 'undecodable'],
	])('%s has no value', (_, hex, row, name, reason) => {
		expect(named(normalize(sample(hex), plan(row), context()))).toEqual([name, reason, null]);
	});

	it('keeps a value outside its range, as uncertain', () => {
		const reading = normalize(sample('41C90000'), plan({ high_range: 4 }), context());
		expect(named(reading).slice(0, 2)).toEqual(['UncertainEngineeringUnitsExceeded', 'out-of-range']);
		expect(reading.value).toBeCloseTo(4.5126, 3);
	});

	it('a sentinel comes before the range, and a frozen value before it too', () => {
		const row = {
			data_type: 'int16',
			sentinels: ['0x8000'],
			low_range: 0,
			frozen_after_s: 60,
			raw_unit: 'mm/s',
			raw_detector: 'rms',
			scale: 1,
		};
		expect(named(normalize(sample('8000'), plan(row), context({ unchangedSince: NOW - 120_000 })))[1]).toBe('sentinel');
		expect(named(normalize(sample('FFFF'), plan(row), context({ unchangedSince: NOW - 120_000 })))).toEqual([
			'UncertainLastUsableValue',
			'frozen',
			-1,
		]);
		expect(named(normalize(sample('FFFF'), plan(row), context({ unchangedSince: NOW - 59_000 })))).toEqual([
			'UncertainEngineeringUnitsExceeded',
			'out-of-range',
			-1,
		]);
	});

	it('asks the validity companion', () => {
		const row = { valid_tag: 'STATUS', valid_when: '&0x8000' };
		expect(named(normalize(sample('41C90000'), plan(row), context({ companion: () => 0x0001 })))).toEqual([
			'BadSensorFailure',
			'not-valid',
			null,
		]);
		expect(normalize(sample('41C90000'), plan(row), context({ companion: () => 0x8001 })).quality).toBe(0);
		expect(normalize(sample('41C90000'), plan({ ...row, valid_when: '=1' }), context({ companion: () => 2 })).reason).toBe(
			'not-valid',
		);
	});

	it('takes time from an age or a time companion, and says that it is the source’s', () => {
		expect(normalize(sample('41C90000'), plan({ age_tag: 'AGE' }), context({ companion: () => 42 }))).toMatchObject({
			at: NOW - 42_000,
			timeFrom: 'source',
		});
		expect(
			normalize(sample('41C90000'), plan({ time_tag: 'TIME' }), context({ companion: () => NOW / 1_000 - 5 })),
		).toMatchObject({ at: NOW - 5_000, timeFrom: 'source' });
	});

	it('a whole number beyond 2^53 is uncertain and exact only in its raw scalar', () => {
		const reading = normalize(
			sample('0020000000000001'),
			plan({ data_type: 'int64', raw_unit: 'mm/s', raw_detector: 'rms', scale: 1 }),
			context(),
		);
		expect(reading).toMatchObject({ raw: 9007199254740993n, reason: 'precision' });
		expect(qualityJson(reading.quality).name).toBe('UncertainSubNormal');
	});

	it('never gives -0', () => {
		expect(Object.is(normalize(sample('80000000'), plan(), context()).value, 0)).toBe(true);
	});
});

describe('one trusted time', () => {
	const trust = { now: NOW, rawEdge: NOW - 86_400_000 * 400, futureMs: 300_000 };
	it.each<[string, number | null, ReturnType<typeof measuredAt>]>([
		[
			'the source’s, cut to the millisecond',
			NOW - 5_000 + 0.9,
			{ at: NOW - 5_000, timeFrom: 'source', sourceAt: null, isUntrusted: false },
		],
		['ours, without one', null, { at: NOW, timeFrom: 'hub', sourceAt: null, isUntrusted: false }],
		[
			'300 s ahead is still the source’s',
			NOW + 300_000,
			{ at: NOW + 300_000, timeFrom: 'source', sourceAt: null, isUntrusted: false },
		],
		['a millisecond more is not', NOW + 300_001, { at: NOW, timeFrom: 'hub', sourceAt: NOW + 300_001, isUntrusted: true }],
		['1970 is no time', 0, { at: NOW, timeFrom: 'hub', sourceAt: 0, isUntrusted: true }],
		[
			'older than what is kept',
			NOW - 401 * 86_400_000,
			{ at: NOW, timeFrom: 'hub', sourceAt: NOW - 401 * 86_400_000, isUntrusted: true },
		],
	])('%s', (_, sourceAt, expected) => {
		expect(measuredAt(sourceAt, NOW, trust, 'source')).toEqual(expected);
	});

	it('a fixed offset corrects a clock that is known to be wrong', () => {
		expect(measuredAt(NOW + 400_000, NOW, trust, -400)).toMatchObject({ at: NOW, timeFrom: 'source' });
	});
});

describe('deadband', () => {
	/** Stores or not against the last stored value. */
	const stored = (values: number[], deadband: number | null, stepMs = 1_000) => {
		let last: LastStored | null = null;
		const kept: number[] = [];
		values.forEach((value, i) => {
			const reading = { at: NOW + i * stepMs, value, quality: 0 };
			if (!shouldStore(reading, last, deadband)) return;
			last = reading;
			kept.push(value);
		});
		return kept;
	};

	it('goes strictly by the last stored value: 2 % of 0 to 50 is 1.0, and three of six are kept [worked by hand after OPC 10000-8 §6.2]', () => {
		expect(percentDeadband(2, 0, 50)).toBe(1);
		expect(stored([10, 10.6, 11, 11.1, 10.2, 10], 1)).toEqual([10, 11.1, 10]);
	});

	it('refuses a percentage above 100 or without a span', () => {
		expect(percentDeadband(101, 0, 50)).toBeNull();
		expect(percentDeadband(2, null, 50)).toBeNull();
	});

	it('nothing stores every reading, 0 only changes', () => {
		expect(stored([1, 1, 2], null)).toEqual([1, 1, 2]);
		expect(stored([1, 1, 2], 0)).toEqual([1, 2]);
	});

	it('always stores a change of quality, a late reading and the first after ten minutes', () => {
		const last = { at: NOW, value: 1, quality: 0 };
		expect(shouldStore({ at: NOW + 1, value: 1, quality: STATUS_CODES.UncertainSubNormal }, last, 5)).toBe(true);
		expect(shouldStore({ at: NOW - 1, value: 1, quality: 0 }, last, 5)).toBe(true);
		expect(shouldStore({ at: NOW + 599_999, value: 1, quality: 0 }, last, 5)).toBe(false);
		expect(shouldStore({ at: NOW + 600_000, value: 1, quality: 0 }, last, 5)).toBe(true);
	});
});

describe('the raw scalar in history', () => {
	it('is left out where the inverse gives it back exactly', () => {
		fc.assert(
			fc.property(fc.integer({ min: -32768, max: 32767 }), (raw) => {
				const row = plan({
					data_type: 'int16',
					scale: 0.1,
					raw_unit: '[degF]',
					unit: 'Cel',
					detector: 'none',
					raw_detector: 'none',
				});
				const value = (raw * row.scale + row.offset) * row.conversion.factor + row.conversion.offset;
				return rawToStore(raw, value, row) === null;
			}),
		);
	});

	it('is kept with a reading that has no value', () => {
		expect(rawToStore(-32768, null, plan())).toBe('-32768');
		expect(rawToStore(NaN, null, plan())).toBe('NaN');
		expect(rawToStore(9007199254740993n, 1, plan())).toBe('9007199254740993');
	});
});
