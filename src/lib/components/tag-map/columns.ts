// Pure.
import { unitText } from '../state/format-value.ts';
import { CLOSED_LISTS, ROW_DEFAULTS, type MapField, type MapRow } from '#lib/domain/tag-map/row.ts';

/** A column of the grid: a field of a row, with its head and its width. */
export interface GridColumn {
	field: MapField;
	label: string;
	group: string;
	width: number;
	kind: 'text' | 'number' | 'flag' | 'list';
	/** Shown until the person chooses otherwise. */
	isUsual: boolean;
	/** Addresses and numbers are set in the figures' lettering. */
	isFigure: boolean;
}

const NUMBERS = new Set<MapField>([
	'scale',
	'offset',
	'frequency_hz',
	'band_low_hz',
	'band_high_hz',
	'low_range',
	'high_range',
	'deadband',
	'interval_ms',
	'expected_every_s',
	'stale_after_s',
	'frozen_after_s',
	'unit_id',
	'register',
	'bit',
]);

const column = (field: MapField, label: string, group: string, width: number, isUsual = false): GridColumn => ({
	field,
	label,
	group,
	width,
	isUsual,
	kind: field === 'enabled' ? 'flag' : field === 'sentinels' ? 'list' : NUMBERS.has(field) ? 'number' : 'text',
	isFigure:
		NUMBERS.has(field) ||
		['node_id', 'topic', 'value_pointer', 'time_pointer', 'quality_pointer', 'metric', 'sentinels', 'valid_when'].includes(field),
});

/** Every column but the tag itself, which stands at the left and stays there. */
export const GRID_COLUMNS: readonly GridColumn[] = [
	column('plant_tag', 'Plant tag', 'Place', 116),
	column('description', 'Description', 'Place', 170),
	column('area', 'Area', 'Place', 86),
	column('machine', 'Machine', 'Place', 66, true),
	column('point', 'Point', 'Place', 54, true),
	column('axis', 'Axis', 'Place', 72, true),
	column('quantity', 'Quantity', 'Place', 86, true),
	column('source', 'Source', '', 132, true),
	column('unit_id', 'Unit id', 'Modbus address', 52, true),
	column('table', 'Table', 'Modbus address', 98, true),
	column('register', 'Register', 'Modbus address', 64, true),
	column('data_type', 'Type', 'Modbus address', 58, true),
	column('byte_order', 'Byte order', 'Modbus address', 72),
	column('word_order', 'Word order', 'Modbus address', 78, true),
	column('bit', 'Bit', 'Modbus address', 38),
	column('sentinels', 'Sentinels', 'Modbus address', 86),
	column('node_id', 'Node id', 'OPC UA address', 250, true),
	column('index_range', 'Index range', 'OPC UA address', 82),
	column('topic', 'Topic', 'MQTT address', 190, true),
	column('value_pointer', 'Value pointer', 'MQTT address', 104, true),
	column('time_pointer', 'Time pointer', 'MQTT address', 98),
	column('quality_pointer', 'Quality pointer', 'MQTT address', 104),
	column('time_format', 'Time format', 'MQTT address', 82),
	column('group_id', 'Group', 'Sparkplug address', 80),
	column('edge_node_id', 'Edge node', 'Sparkplug address', 90),
	column('device_id', 'Device', 'Sparkplug address', 80),
	column('metric', 'Metric', 'Sparkplug address', 150),
	column('raw_unit', 'Raw unit', 'Raw', 70, true),
	column('raw_detector', 'Raw detector', 'Raw', 96, true),
	column('scale', 'Scale', 'Raw', 56, true),
	column('offset', 'Offset', 'Raw', 52),
	column('unit', 'Unit', 'Value', 56, true),
	column('detector', 'Detector', 'Value', 90, true),
	column('states', 'States', 'Value', 120),
	column('deadband', 'Deadband', 'Value', 70),
	column('low_range', 'Low', 'Range', 48, true),
	column('high_range', 'High', 'Range', 52, true),
	column('frequency_hz', 'Frequency, Hz', 'Measured', 88),
	column('band_low_hz', 'Band from, Hz', 'Measured', 90),
	column('band_high_hz', 'Band to, Hz', 'Measured', 82),
	column('interval_ms', 'Every, ms', 'Time', 68, true),
	column('expected_every_s', 'Measures every, s', 'Time', 112),
	column('stale_after_s', 'Stale after, s', 'Time', 88),
	column('frozen_after_s', 'Frozen after, s', 'Time', 96),
	column('time_tag', 'Time tag', 'Companions', 120),
	column('age_tag', 'Age tag', 'Companions', 120),
	column('valid_tag', 'Valid tag', 'Companions', 120),
	column('valid_when', 'Valid when', 'Companions', 76),
	column('enabled', 'Read', '', 44, true),
];

export const TAG_COLUMN: GridColumn = { ...column('tag', 'Tag', '', 158, true), isFigure: false };

/** A cell as people read it; a default that the row leaves unsaid is shown as what stands. */
export function cellText(row: MapRow, field: MapField): string {
	const value = row[field];
	if (field === 'enabled') return value === false ? 'no' : 'yes';
	if (value == null) return '';
	if (Array.isArray(value)) return value.join(' ');
	if (field === 'word_order') return value === 'little' ? 'low first' : value === 'big' ? 'high first' : String(value);
	if (field === 'table') return String(value).replace('-', ' ');
	if (field === 'detector' || field === 'raw_detector') return value === 'none' ? '' : String(value).replaceAll('-', ' ');
	if (field === 'axis' && value === 'none') return '';
	if (field === 'unit' || field === 'raw_unit') return unitText(String(value));
	return String(value);
}

/** What stands where the row says nothing, in second ink. */
export function defaultText(row: MapRow, field: MapField): string {
	if (field === 'word_order') return row.register == null ? '' : 'high first';
	if (field === 'byte_order') return row.register == null ? '' : 'big';
	if (field === 'raw_unit') return unitText(row.unit);
	if (field === 'raw_detector') return row.detector && row.detector !== 'none' ? row.detector.replaceAll('-', ' ') : '';
	if (field === 'scale' || field === 'offset' || field === 'interval_ms') return String(ROW_DEFAULTS[field]);
	return '';
}

/** A cell as it is edited and copied: the map's own words. */
export function editText(row: MapRow, field: MapField): string {
	const value = row[field];
	if (field === 'enabled') return value === false ? 'no' : 'yes';
	if (value == null) return '';
	return Array.isArray(value) ? value.join(' ') : String(value);
}

const ALIASES: Readonly<Record<string, string>> = {
	'high first': 'big',
	'low first': 'little',
	'input register': 'input-register',
	'holding register': 'holding-register',
	'discrete input': 'discrete-input',
	'derived peak': 'derived-peak',
	'peak to peak': 'peak-to-peak',
	'derived peak to peak': 'derived-peak-to-peak',
};

export type Parsed = { ok: true; value: MapRow[MapField] } | { ok: false; detail: string };

/** What was typed or pasted, as a field's value; empty clears it. What a row means is the draft check's business. */
export function parseCell(field: MapField, typed: string): Parsed {
	const text = typed.trim();
	const found = field === 'tag' ? TAG_COLUMN : GRID_COLUMNS.find((candidate) => candidate.field === field);
	if (!found) return { ok: false, detail: 'not a column of the map' };
	if (field === 'tag') return text === '' ? { ok: false, detail: 'a row needs its tag name' } : { ok: true, value: text };
	if (text === '') return { ok: true, value: null };
	if (found.kind === 'number') {
		const number = Number(/^[+-]?\d+,\d+$/.test(text) ? text.replace(',', '.') : text);
		return Number.isFinite(number) ? { ok: true, value: number } : { ok: false, detail: `"${text}" is not a number` };
	}
	if (found.kind === 'flag') {
		if (/^(yes|true|1|y)$/i.test(text)) return { ok: true, value: true };
		if (/^(no|false|0|n)$/i.test(text)) return { ok: true, value: false };
		return { ok: false, detail: 'yes or no' };
	}
	if (found.kind === 'list') {
		return {
			ok: true,
			value: text.split(/\s+/).map((part) => (Number.isFinite(Number(part)) && !/^0x/i.test(part) ? Number(part) : part)),
		};
	}
	return { ok: true, value: ALIASES[text.toLowerCase()] ?? text };
}

/** Suggestions for a cell: a closed list, or what other rows say. */
export function suggestions(field: MapField, rows: readonly MapRow[], sources: readonly string[]): readonly string[] {
	const closed = CLOSED_LISTS[field];
	if (closed) return closed;
	if (field === 'source') return sources;
	if (!['machine', 'area', 'point', 'unit', 'raw_unit', 'group_id', 'edge_node_id', 'device_id'].includes(field)) return [];
	return [...new Set(rows.map((row) => row[field]).filter((value): value is string => typeof value === 'string' && value !== ''))]
		.sort()
		.slice(0, 200);
}

/** Tab-separated text from a spreadsheet as rows of cells; quoted cells may hold tabs and line breaks. */
export function readClipboard(text: string): string[][] {
	const rows: string[][] = [[]];
	let cell = '';
	let isQuoted = false;
	for (let i = 0; i < text.length; i += 1) {
		const sign = text[i]!;
		if (isQuoted) {
			if (sign === '"' && text[i + 1] === '"') {
				cell += '"';
				i += 1;
			} else if (sign === '"') isQuoted = false;
			else cell += sign;
		} else if (sign === '"' && cell === '') isQuoted = true;
		else if (sign === '\t' || sign === '\n') {
			rows[rows.length - 1]!.push(cell.replace(/\r$/, ''));
			cell = '';
			if (sign === '\n') rows.push([]);
		} else cell += sign;
	}
	rows[rows.length - 1]!.push(cell.replace(/\r$/, ''));
	const last = rows[rows.length - 1]!;
	if (last.length === 1 && last[0] === '') rows.pop();
	return rows;
}
