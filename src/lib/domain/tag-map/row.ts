// Pure.
import { z } from 'zod';
import { MODBUS_DATA_TYPES, MODBUS_TABLES } from './address.ts';

/** Closed list of quantities, each with the dimension its units must have (UCUM base form). */
export const QUANTITIES = [
	'velocity',
	'acceleration',
	'displacement',
	'impact',
	'temperature',
	'pressure',
	'differential-pressure',
	'flow',
	'level',
	'speed',
	'power',
	'current',
	'voltage',
	'frequency',
	'battery',
	'signal',
	'state',
	'count',
	'ratio',
] as const;
export type Quantity = (typeof QUANTITIES)[number];
export const AXES = ['horizontal', 'vertical', 'axial', 'none'] as const;
export const DETECTORS = ['rms', 'peak', 'derived-peak', 'peak-to-peak', 'derived-peak-to-peak', 'none'] as const;
export type Detector = (typeof DETECTORS)[number];
export const ORDERS = ['big', 'little'] as const;
export const TIME_FORMATS = ['auto', 's', 'ms', 'us', 'ns', 'rfc3339'] as const;

/** Letters, digits, `.`, `_`, `-`; begins with a letter or digit. */
export const TAG_NAME = /^[A-Za-z0-9][A-Za-z0-9._-]{0,119}$/;

const text = z.string().max(500).nullish();
const number = z.number().nullish();
const positive = z.number().positive().nullish();

/**
 * One row of the tag map: flat, snake_case, the same names in JSON, CSV and the database.
 * The shape is all this schema checks; what a row means is checked in `check-draft.ts`, so that a draft in error can still be saved.
 */
export const mapRowSchema = z.strictObject({
	id: z.number().int().positive().nullish(),
	tag: z.string().max(200),
	plant_tag: text,
	description: text,
	area: text,
	machine: text,
	point: text,
	axis: z.string().max(40).nullish(),
	quantity: z.string().max(40).nullish(),
	/** Name of the source within the site. */
	source: z.string().max(120).nullish(),
	raw_unit: z.string().max(80).nullish(),
	raw_detector: z.string().max(40).nullish(),
	scale: number,
	offset: number,
	unit: z.string().max(80).nullish(),
	detector: z.string().max(40).nullish(),
	frequency_hz: positive,
	band_low_hz: number,
	band_high_hz: number,
	low_range: number,
	high_range: number,
	states: z.string().max(1_000).nullish(),
	deadband: number,
	interval_ms: number,
	expected_every_s: number,
	stale_after_s: number,
	frozen_after_s: number,
	time_tag: z.string().max(200).nullish(),
	age_tag: z.string().max(200).nullish(),
	valid_tag: z.string().max(200).nullish(),
	valid_when: z.string().max(40).nullish(),
	enabled: z.boolean().nullish(),
	unit_id: number,
	table: z.string().max(40).nullish(),
	register: number,
	data_type: z.string().max(40).nullish(),
	byte_order: z.string().max(10).nullish(),
	word_order: z.string().max(10).nullish(),
	bit: number,
	/** Numbers of the decoded raw, or bit patterns like `0x8000`. */
	sentinels: z
		.array(z.union([z.number(), z.string().max(40)]))
		.max(32)
		.nullish(),
	node_id: z.string().max(500).nullish(),
	index_range: z.string().max(40).nullish(),
	topic: z.string().max(1_000).nullish(),
	value_pointer: z.string().max(500).nullish(),
	time_pointer: z.string().max(500).nullish(),
	quality_pointer: z.string().max(500).nullish(),
	time_format: z.string().max(20).nullish(),
	group_id: z.string().max(200).nullish(),
	edge_node_id: z.string().max(200).nullish(),
	device_id: z.string().max(200).nullish(),
	metric: z.string().max(500).nullish(),
});

export type MapRow = z.infer<typeof mapRowSchema>;
export type MapField = keyof MapRow;

/** Columns in their order for CSV, grid and documentation. */
export const MAP_FIELDS = Object.keys(mapRowSchema.shape) as MapField[];

/** Values a closed-list field may have; anything else is a check error. */
export const CLOSED_LISTS: Partial<Record<MapField, readonly string[]>> = {
	axis: AXES,
	quantity: QUANTITIES,
	detector: DETECTORS,
	raw_detector: DETECTORS,
	table: MODBUS_TABLES,
	data_type: MODBUS_DATA_TYPES,
	byte_order: ORDERS,
	word_order: ORDERS,
	time_format: TIME_FORMATS,
};

/** Defaults that stand where a row says nothing. */
export const ROW_DEFAULTS = {
	scale: 1,
	offset: 0,
	interval_ms: 1_000,
	enabled: true,
	byte_order: 'big',
	word_order: 'big',
} as const;

/** A finding of the check: an error blocks publishing, a warning does not. `row` counts from 1. */
export interface Finding {
	tag: string;
	row: number;
	field: MapField | null;
	code: string;
	detail: string;
}
export interface DraftCheck {
	errors: Finding[];
	warnings: Finding[];
	version: number;
}
