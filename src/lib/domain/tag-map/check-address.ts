// Pure.
import type { SourceKind } from '../source-settings.ts';
import type { RowReport } from './check-draft.ts';
import { registersOf, type ModbusDataType } from './address.ts';
import { isNumericRange, nodeIdForm } from './node-id.ts';
import { CLOSED_LISTS, type MapField, type MapRow } from './row.ts';
import { hasWildcard, isJsonPointer, topicFilterFault } from './topic-filter.ts';

const FIELDS: Record<'modbus' | 'opcua' | 'mqtt' | 'sparkplug', readonly MapField[]> = {
	modbus: ['unit_id', 'table', 'register', 'data_type', 'byte_order', 'word_order', 'bit'],
	opcua: ['node_id', 'index_range'],
	mqtt: ['topic', 'value_pointer', 'time_pointer', 'quality_pointer', 'time_format'],
	sparkplug: ['group_id', 'edge_node_id', 'device_id', 'metric'],
};

/** Checks the address fields of a row for its source's kind; answers a text that is equal for equal addresses, or null. */
export function checkAddress(
	row: MapRow,
	kind: SourceKind,
	payload: 'json' | 'sparkplug' | null,
	report: RowReport,
): string | null {
	const form = kind === 'mqtt' ? (payload === 'sparkplug' ? 'sparkplug' : 'mqtt') : kind;
	for (const [other, fields] of Object.entries(FIELDS)) {
		if (other === form) continue;
		for (const field of fields) {
			if (row[field] != null && row[field] !== '')
				report.warning(field, 'field-of-other-kind', `is for ${other} sources and is not used here`);
		}
	}
	switch (form) {
		case 'modbus':
			return checkModbus(row, report);
		case 'opcua':
			return checkOpcua(row, report);
		case 'mqtt':
			return checkMqtt(row, report);
		case 'sparkplug':
			return checkSparkplug(row, report);
	}
}

function whole(
	row: MapRow,
	field: 'unit_id' | 'register' | 'bit',
	low: number,
	high: number,
	report: RowReport,
	required: boolean,
): number | null {
	const value = row[field];
	if (value == null) {
		if (required) report.error(field, 'missing', `nothing given; expected a whole number from ${low} to ${high}`);
		return null;
	}
	if (!Number.isInteger(value) || value < low || value > high) {
		report.error(field, 'number-range', `${value} found; expected a whole number from ${low} to ${high}`);
		return null;
	}
	return value;
}

function checkModbus(row: MapRow, report: RowReport): string | null {
	const unit = whole(row, 'unit_id', 0, 255, report, true);
	const register = whole(row, 'register', 0, 65_535, report, true);
	const isBits = row.table === 'coil' || row.table === 'discrete-input';
	if (!row.table)
		report.error('table', 'missing', 'nothing given; expected coil, discrete-input, input-register or holding-register');
	if (!row.data_type && !isBits) report.error('data_type', 'missing', 'nothing given; expected a type such as float32 or int16');
	const type = (row.data_type || 'bool') as ModbusDataType;
	if (isBits && row.data_type && row.data_type !== 'bool')
		report.error('data_type', 'type-of-bits', `${row.data_type} found; a ${row.table} holds bool only`);
	if (!isBits && type === 'bool' && row.bit == null)
		report.error('bit', 'missing', 'a bool in a register needs its bit, 0 the least significant');
	const width = CLOSED_LISTS.data_type?.includes(type) ? registersOf(type) : 1;
	const bit = whole(row, 'bit', 0, width * 16 - 1, report, false);
	if (row.bit != null && type.startsWith('float')) report.error('bit', 'bit-of-float', `a ${type} has no bits to pick`);
	if (register !== null && register + width > 65_536)
		report.error('register', 'past-the-end', `register ${register} and ${width} registers run past 65,535`);
	if (register !== null && register >= 30_001 && register <= 49_999) {
		report.warning(
			'register',
			'reference-number',
			`${register} looks like a reference number; expected the address on the wire, so 40001 is register 0 of the holding registers`,
		);
	}
	if (width === 1 && row.word_order === 'little')
		report.warning('word_order', 'one-register', `${type} is one register; word order has no effect`);
	for (const sentinel of row.sentinels ?? []) {
		if (typeof sentinel === 'string' && !/^0x[0-9a-fA-F]{1,16}$/.test(sentinel)) {
			report.error('sentinels', 'sentinel-form', `"${sentinel}" found; expected a number or a bit pattern like 0x8000`);
		}
	}
	if (unit === null || register === null || !row.table) return null;
	return [unit, row.table, register, type, row.byte_order ?? 'big', row.word_order ?? 'big', bit].join('|');
}

function checkOpcua(row: MapRow, report: RowReport): string | null {
	if (!row.node_id) {
		report.error('node_id', 'missing', 'nothing given; expected a node id such as nsu=urn:maker:device;s=Pump1.Temperature');
		return null;
	}
	const form = nodeIdForm(row.node_id);
	if (form === 'wrong') {
		report.error('node_id', 'node-id-form', `"${row.node_id}" is not a node id; expected nsu=URI; and i=, s=, g= or b=`);
		return null;
	}
	if (form === 'index')
		report.error(
			'node_id',
			'namespace-index',
			'names its namespace by index, which may move: it is resolved to its URI when the source is browsed or tested',
		);
	if (row.index_range && !isNumericRange(row.index_range))
		report.error('index_range', 'index-range-form', `"${row.index_range}" found; expected 2 or 0:3`);
	return `${row.node_id}|${row.index_range ?? ''}`;
}

function checkMqtt(row: MapRow, report: RowReport): string | null {
	if (!row.topic) {
		report.error('topic', 'missing', 'nothing given; expected a topic such as hall/pump-1/vibration');
		return null;
	}
	const fault = topicFilterFault(row.topic);
	if (fault) {
		report.error('topic', 'topic-form', `"${row.topic}": ${fault}`);
		return null;
	}
	if (hasWildcard(row.topic)) report.warning('topic', 'several-topics', 'a filter can let several topics feed this one tag');
	for (const field of ['value_pointer', 'time_pointer', 'quality_pointer'] as const) {
		const pointer = row[field];
		if (pointer && !isJsonPointer(pointer))
			report.error(field, 'pointer-form', `"${pointer}" is not a JSON Pointer; expected a form like /values/0/rms`);
	}
	return `${row.topic}|${row.value_pointer ?? ''}`;
}

function checkSparkplug(row: MapRow, report: RowReport): string | null {
	for (const field of ['group_id', 'edge_node_id', 'metric'] as const) {
		if (!row[field]) report.error(field, 'missing', 'nothing given');
	}
	for (const field of ['group_id', 'edge_node_id', 'device_id'] as const) {
		const id = row[field];
		if (id && /[+/#]/.test(id)) report.error(field, 'id-form', `"${id}" holds +, / or #, which an id may not`);
	}
	if (!row.group_id || !row.edge_node_id || !row.metric) return null;
	return [row.group_id, row.edge_node_id, row.device_id ?? '', row.metric].join('|');
}
