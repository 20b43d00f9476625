import { describe, expect, it } from 'vitest';
import { ok, refuse } from '../outcome.ts';
import { checkDraft, type CheckContext, type UnitRules } from './check-draft.ts';
import type { MapRow } from './row.ts';

const units: UnitRules = {
	isUnit: (code) => ['mm/s', '[in_i]/s', 'Cel', '1', '[g]'].includes(code),
	fitsQuantity: (unit, quantity) =>
		quantity === 'velocity' ? unit.endsWith('/s') : quantity === 'temperature' ? unit === 'Cel' : true,
	conversion: ({ rawUnit, unit }) =>
		rawUnit === unit || (rawUnit === '[in_i]/s' && unit === 'mm/s')
			? ok(null)
			: refuse('no-conversion', `${rawUnit} does not convert to ${unit}`),
};

const context = (extra: Partial<CheckContext> = {}): CheckContext => ({
	sources: new Map([
		['gateway b', { name: 'Gateway B', kind: 'modbus', enabled: true, payload: null }],
		['gateway a', { name: 'Gateway A', kind: 'opcua', enabled: true, payload: null }],
		['broker', { name: 'Broker', kind: 'mqtt', enabled: true, payload: 'json' }],
		['off', { name: 'Off', kind: 'modbus', enabled: false, payload: null }],
	]),
	machineAreas: new Map([['hl-3', 'High Lift']]),
	settled: new Map(),
	convert: false,
	units,
	...extra,
});

const modbus = (extra: Partial<MapRow> = {}): MapRow => ({
	tag: 'HL-3.MDE.H.VEL',
	source: 'Gateway B',
	unit: 'mm/s',
	raw_unit: '[in_i]/s',
	unit_id: 4,
	table: 'input-register',
	register: 100,
	data_type: 'float32',
	...extra,
});
const opcua = (extra: Partial<MapRow> = {}): MapRow => ({
	tag: 'A.TEMP',
	source: 'Gateway A',
	unit: 'Cel',
	node_id: 'nsu=urn:plant:a;s=A.TEMP',
	...extra,
});
const mqtt = (extra: Partial<MapRow> = {}): MapRow => ({
	tag: 'B.FLOW',
	source: 'Broker',
	unit: '1',
	topic: 'hall/flow',
	value_pointer: '/value',
	...extra,
});

const found = (rows: MapRow[], extra?: Partial<CheckContext>) => {
	const check = checkDraft(rows, context(extra), 7);
	return {
		errors: check.errors.map(({ row, field, code }) => `${row} ${field} ${code}`),
		warnings: check.warnings.map(({ row, field, code }) => `${row} ${field} ${code}`),
	};
};

describe('the check of a draft', () => {
	it('finds nothing in rows that are whole, and says which version it checked', () => {
		expect(checkDraft([modbus(), opcua(), mqtt()], context(), 7)).toEqual({ errors: [], warnings: [], version: 7 });
	});

	it.each<[string, MapRow, string]>([
		['a name with a blank', modbus({ tag: 'HL 3' }), '1 tag tag-form'],
		['a name that is too long', modbus({ tag: 'A'.repeat(121) }), '1 tag tag-form'],
		['no source', modbus({ source: null }), '1 source missing'],
		['an unknown source', modbus({ source: 'Gateway C' }), '1 source unknown-source'],
		['no unit', modbus({ unit: null }), '1 unit missing'],
		['an unknown unit', modbus({ unit: 'mm/sec' }), '1 unit unknown-unit'],
		['a unit of another quantity', modbus({ quantity: 'temperature' }), '1 unit unit-quantity'],
		['a conversion without meaning', modbus({ unit: 'Cel', raw_unit: 'mm/s' }), '1 raw_unit no-conversion'],
		['an axis that is not in the list', modbus({ axis: 'sideways' }), '1 axis not-in-list'],
		['a scale of zero', modbus({ scale: 0 }), '1 scale scale-zero'],
		['a range upside down', modbus({ low_range: 50, high_range: 0 }), '1 high_range range-order'],
		['a negative deadband', modbus({ deadband: -1 }), '1 deadband below-zero'],
		['a register past the end', modbus({ register: 65_535 }), '1 register past-the-end'],
		['a unit id above 255', modbus({ unit_id: 300 }), '1 unit_id number-range'],
		['half a register', modbus({ register: 1.5 }), '1 register number-range'],
		['a bool in a register without its bit', modbus({ data_type: 'bool' }), '1 bit missing'],
		['a bit of a float', modbus({ bit: 3 }), '1 bit bit-of-float'],
		['a float in a coil', modbus({ table: 'coil' }), '1 data_type type-of-bits'],
		['a sentinel that is neither number nor pattern', modbus({ sentinels: ['8000h'] }), '1 sentinels sentinel-form'],
		['a companion that is not there', modbus({ age_tag: 'nowhere' }), '1 age_tag unknown-tag'],
		['a tag as its own companion', modbus({ time_tag: 'HL-3.MDE.H.VEL' }), '1 time_tag own-companion'],
		['validity without its form', modbus({ valid_tag: 'nowhere' }), '1 valid_when missing'],
		['an area that contradicts its machine', modbus({ machine: 'HL-3', area: 'Low Lift' }), '1 area area-contradicts-machine'],
		['states in another form', modbus({ states: 'open,closed' }), '1 states states-form'],
		['a node id that is none', opcua({ node_id: 'Pump1' }), '1 node_id node-id-form'],
		['a namespace by index', opcua({ node_id: 'ns=2;s=A' }), '1 node_id namespace-index'],
		['a topic filter with # inside', mqtt({ topic: 'hall/#/x' }), '1 topic topic-form'],
		['a pointer without its slash', mqtt({ value_pointer: 'value' }), '1 value_pointer pointer-form'],
	])('refuses %s', (_, row, expected) => {
		expect(found([row]).errors).toContain(expected);
	});

	it('refuses the same name in another case, and names the row that has it', () => {
		const check = checkDraft([modbus(), modbus({ tag: 'hl-3.mde.h.vel', register: 102 })], context(), 1);
		expect(check.errors).toEqual([
			{ tag: 'hl-3.mde.h.vel', row: 2, field: 'tag', code: 'tag-twice', detail: expect.stringContaining('row 1') },
		]);
	});

	it('refuses two rows that put one machine in two areas', () => {
		expect(
			found([modbus({ machine: 'LL-1', area: 'Low Lift' }), modbus({ tag: 'B', register: 102, machine: 'll-1', area: 'Dosing' })])
				.errors,
		).toEqual(['2 area area-contradicts-machine']);
	});

	it('refuses another unit for a tag that has readings, unless the draft converts', () => {
		const settled = new Map([[5, { unit: '[in_i]/s', detector: 'none' }]]);
		expect(found([modbus({ id: 5 })], { settled }).errors).toEqual(['1 unit unit-of-settled-tag']);
		expect(found([modbus({ id: 5 })], { settled, convert: true }).errors).toEqual([]);
	});

	it.each<[string, MapRow[], string]>([
		['two tags on one address', [modbus(), modbus({ tag: 'B' })], '2 null same-address'],
		['a register that looks like a reference number', [modbus({ register: 40_001 })], '1 register reference-number'],
		['a filter that lets several topics feed one tag', [mqtt({ topic: 'hall/+/flow' })], '1 topic several-topics'],
		[
			'a tag that is stale between its values',
			[modbus({ expected_every_s: 600, stale_after_s: 60 })],
			'1 stale_after_s stale-too-soon',
		],
		['fields of another kind of source', [modbus({ topic: 'x' })], '1 topic field-of-other-kind'],
		['a source that is switched off', [modbus({ source: 'Off' })], '1 source source-disabled'],
		['a state without words', [modbus({ quantity: 'state', unit: '1', raw_unit: '1' })], '1 states no-state-words'],
	])('warns of %s', (_, rows, expected) => {
		const check = found(rows);
		expect(check.errors).toEqual([]);
		expect(check.warnings).toContain(expected);
	});
});
