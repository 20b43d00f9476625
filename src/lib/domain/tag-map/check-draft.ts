// Pure.
import type { Outcome } from '../outcome.ts';
import type { SourceKind } from '../source-settings.ts';
import { checkAddress } from './check-address.ts';
import {
	CLOSED_LISTS,
	ROW_DEFAULTS,
	TAG_NAME,
	type Detector,
	type DraftCheck,
	type Finding,
	type MapField,
	type MapRow,
} from './row.ts';
import { parseStates } from './states.ts';

/** What the check must know of units; given by the caller, so that this file needs no unit table. */
export interface UnitRules {
	/** True for a unit that is known (UCUM code). */
	isUnit(code: string): boolean;
	/** True when the unit can measure the quantity. */
	fitsQuantity(unit: string, quantity: string): boolean;
	/** Whether raw values can become values: refuses with a reason and a sentence. */
	conversion(from: {
		rawUnit: string;
		rawDetector: Detector;
		unit: string;
		detector: Detector;
		frequencyHz: number | null;
	}): Outcome<unknown>;
}

/** What the check knows of the site beside the rows. */
export interface CheckContext {
	/** Sources by lower-case name. */
	sources: ReadonlyMap<string, { name: string; kind: SourceKind; enabled: boolean; payload: 'json' | 'sparkplug' | null }>;
	/** Area of each existing machine, by lower-case machine name. */
	machineAreas: ReadonlyMap<string, string | null>;
	/** Published tags with readings or limits: their unit and detector change only on purpose. */
	settled: ReadonlyMap<number, { unit: string; detector: string }>;
	/** The draft says that limits, deadband and ranges are converted with the unit. */
	convert: boolean;
	units: UnitRules;
}

/** Longest and shortest time an interval may be. */
const INTERVAL_MS = { low: 10, high: 86_400_000 };

/**
 * Checks every rule that can be known without asking a source. Rows count from 1 in the order given.
 * Errors keep a draft from being published; warnings do not.
 */
export function checkDraft(rows: readonly MapRow[], context: CheckContext, version: number): DraftCheck {
	const check = new Findings(version);
	const names = new Map<string, number>();
	const byName = new Map<string, MapRow>();
	for (const row of rows) byName.set(row.tag.toLowerCase(), row);
	const areas = new Map<string, { area: string; row: number }>();
	const addresses = new Map<string, string>();
	const conversions = new Map<string, Outcome<unknown>>();

	rows.forEach((row, i) => {
		const report = check.forRow(row.tag, i + 1);
		checkName(row, i + 1, names, report);
		checkClosedLists(row, report);
		const source = row.source ? context.sources.get(row.source.toLowerCase()) : undefined;
		if (!row.source) report.error('source', 'missing', 'no source given; expected the name of a source of this site');
		else if (!source)
			report.error('source', 'unknown-source', `no source "${row.source}" at this site; expected one of ${listNames(context)}`);
		else if (!source.enabled)
			report.warning('source', 'source-disabled', `${source.name} is switched off, so the tag stays without values`);
		if (source) {
			const key = checkAddress(row, source.kind, source.payload, report);
			if (key) {
				const full = `${source.name}|${key}`;
				const twin = addresses.get(full);
				if (twin) report.warning(null, 'same-address', `reads the same address as ${twin}`);
				else addresses.set(full, row.tag);
			}
		}
		checkUnits(row, context, conversions, report);
		checkNumbers(row, report);
		checkCompanions(row, byName, report);
		checkArea(row, i + 1, areas, context, report);
		checkSettled(row, context, report);
		if (row.states) {
			const states = parseStates(row.states);
			if (!states.ok)
				report.error('states', 'states-form', `${states.detail ?? states.reason}; expected a form like 0=closed;1=open`);
		}
		if (row.quantity === 'state' && !row.states)
			report.warning('states', 'no-state-words', 'a state without words shows only its number');
	});
	return check.answer();
}

/** Reports on one row. */
export interface RowReport {
	error(field: MapField | null, code: string, detail: string): void;
	warning(field: MapField | null, code: string, detail: string): void;
}

class Findings {
	readonly #errors: Finding[] = [];
	readonly #warnings: Finding[] = [];
	readonly #version: number;
	constructor(version: number) {
		this.#version = version;
	}
	forRow(tag: string, row: number): RowReport {
		return {
			error: (field, code, detail) => this.#errors.push({ tag, row, field, code, detail }),
			warning: (field, code, detail) => this.#warnings.push({ tag, row, field, code, detail }),
		};
	}
	answer(): DraftCheck {
		return { errors: this.#errors, warnings: this.#warnings, version: this.#version };
	}
}

function listNames(context: CheckContext): string {
	const names = [...context.sources.values()].map((source) => source.name);
	if (names.length === 0) return '(the site has no source yet)';
	return names.length > 6 ? `${names.slice(0, 6).join(', ')} …` : names.join(', ');
}

function checkName(row: MapRow, number: number, names: Map<string, number>, report: RowReport): void {
	if (!row.tag) report.error('tag', 'missing', 'no tag name given');
	else if (!TAG_NAME.test(row.tag)) {
		report.error(
			'tag',
			'tag-form',
			`"${row.tag}" is not a tag name; expected 1 to 120 letters, digits, . _ -, beginning with a letter or digit`,
		);
	}
	const key = row.tag.toLowerCase();
	const first = names.get(key);
	if (first !== undefined)
		report.error('tag', 'tag-twice', `"${row.tag}" stands in row ${first} too; names are unique whatever the case`);
	else names.set(key, number);
}

function checkClosedLists(row: MapRow, report: RowReport): void {
	for (const [field, list] of Object.entries(CLOSED_LISTS) as [MapField, readonly string[]][]) {
		const value = row[field];
		if (typeof value === 'string' && value !== '' && !list.includes(value)) {
			report.error(field, 'not-in-list', `"${value}" found; expected ${list.join(', ')}`);
		}
	}
}

function checkUnits(row: MapRow, context: CheckContext, known: Map<string, Outcome<unknown>>, report: RowReport): void {
	const { units } = context;
	if (!row.unit) {
		report.error('unit', 'missing', 'no unit given; expected a UCUM code such as mm/s, Cel or 1');
		return;
	}
	const rawUnit = row.raw_unit || row.unit;
	let sound = true;
	for (const [field, unit] of [
		['unit', row.unit],
		['raw_unit', rawUnit],
	] as const) {
		if (!units.isUnit(unit)) {
			sound = false;
			if (field === 'unit' || row.raw_unit)
				report.error(
					field,
					'unknown-unit',
					`"${unit}" is not a UCUM unit; expected a code such as mm/s, [in_i]/s, [g], Cel, [degF], %, 1`,
				);
		}
	}
	if (!sound) return;
	if (row.quantity && CLOSED_LISTS.quantity?.includes(row.quantity) && !units.fitsQuantity(row.unit, row.quantity)) {
		report.error('unit', 'unit-quantity', `${row.unit} does not measure ${row.quantity}`);
	}
	const from = {
		rawUnit,
		rawDetector: (row.raw_detector || row.detector || 'none') as Detector,
		unit: row.unit,
		detector: (row.detector || 'none') as Detector,
		frequencyHz: row.frequency_hz ?? null,
	};
	const key = JSON.stringify(from);
	let outcome = known.get(key);
	if (!outcome) {
		outcome = units.conversion(from);
		known.set(key, outcome);
	}
	if (!outcome.ok)
		report.error(
			row.raw_unit ? 'raw_unit' : 'unit',
			outcome.reason,
			outcome.detail ?? `${rawUnit} does not convert to ${row.unit}`,
		);
}

function checkNumbers(row: MapRow, report: RowReport): void {
	const scale = row.scale ?? ROW_DEFAULTS.scale;
	if (scale === 0)
		report.error('scale', 'scale-zero', 'a scale of 0 would make every value the offset; expected any other number');
	const interval = row.interval_ms ?? ROW_DEFAULTS.interval_ms;
	if (!Number.isInteger(interval) || interval < INTERVAL_MS.low || interval > INTERVAL_MS.high) {
		report.error(
			'interval_ms',
			'interval-range',
			`${interval} found; expected whole milliseconds from ${INTERVAL_MS.low} to ${INTERVAL_MS.high}`,
		);
	}
	for (const field of ['expected_every_s', 'stale_after_s', 'frozen_after_s'] as const) {
		const value = row[field];
		if (value != null && !(value > 0)) report.error(field, 'not-above-zero', `${value} found; expected seconds above 0`);
	}
	if (row.deadband != null && row.deadband < 0)
		report.error('deadband', 'below-zero', `${row.deadband} found; expected 0, a number above 0, or nothing`);
	if (row.low_range != null && row.high_range != null && row.low_range >= row.high_range) {
		report.error('high_range', 'range-order', `the range ends at ${row.high_range}, not above its beginning ${row.low_range}`);
	}
	if (row.band_low_hz != null && row.band_high_hz != null && row.band_low_hz >= row.band_high_hz) {
		report.error(
			'band_high_hz',
			'band-order',
			`the band ends at ${row.band_high_hz} Hz, not above its beginning ${row.band_low_hz} Hz`,
		);
	}
	const spacing = Math.max(interval / 1_000, row.expected_every_s ?? 0);
	if (row.stale_after_s != null && row.stale_after_s <= spacing) {
		report.warning(
			'stale_after_s',
			'stale-too-soon',
			`stale after ${row.stale_after_s} s, but values come every ${spacing} s: it will be stale between values`,
		);
	}
	if (row.frozen_after_s != null && row.frozen_after_s <= spacing) {
		report.warning(
			'frozen_after_s',
			'frozen-too-soon',
			`frozen after ${row.frozen_after_s} s, but values come every ${spacing} s`,
		);
	}
}

function checkCompanions(row: MapRow, byName: ReadonlyMap<string, MapRow>, report: RowReport): void {
	for (const field of ['time_tag', 'age_tag', 'valid_tag'] as const) {
		const name = row[field];
		if (!name) continue;
		const companion = byName.get(name.toLowerCase());
		if (!companion) report.error(field, 'unknown-tag', `no row named "${name}"`);
		else if (companion === row) report.error(field, 'own-companion', 'a tag cannot be its own companion');
		else if (companion.source?.toLowerCase() !== row.source?.toLowerCase())
			report.error(field, 'other-source', `"${name}" is on another source`);
		else if (companion.enabled === false) report.warning(field, 'companion-disabled', `"${name}" is switched off`);
	}
	if (row.time_tag && row.age_tag)
		report.error('age_tag', 'time-and-age', 'a time and an age companion contradict each other; give one');
	if (row.valid_tag && !row.valid_when)
		report.error('valid_when', 'missing', 'says which tag tells validity but not when it is valid; expected =1 or &0x8000');
	if (row.valid_when && !row.valid_tag) report.error('valid_tag', 'missing', 'says when it is valid but not which tag tells');
	if (row.valid_when && !/^(=-?\d+|&(0x[0-9a-fA-F]+|\d+))$/.test(row.valid_when)) {
		report.error(
			'valid_when',
			'valid-form',
			`"${row.valid_when}" found; expected = and a number, or & and a bit mask like 0x8000`,
		);
	}
}

function checkArea(
	row: MapRow,
	number: number,
	areas: Map<string, { area: string; row: number }>,
	context: CheckContext,
	report: RowReport,
): void {
	if (row.point && !row.machine) report.error('machine', 'missing', 'a measuring point needs its machine');
	if (row.axis && row.axis !== 'none' && !row.point)
		report.warning('point', 'axis-without-point', 'has an axis but no measuring point');
	if (!row.machine || !row.area) return;
	const key = row.machine.toLowerCase();
	const existing = context.machineAreas.get(key);
	if (existing && existing.toLowerCase() !== row.area.toLowerCase()) {
		report.error('area', 'area-contradicts-machine', `${row.machine} is in ${existing}; this row says ${row.area}`);
		return;
	}
	const first = areas.get(key);
	if (!first) areas.set(key, { area: row.area, row: number });
	else if (first.area.toLowerCase() !== row.area.toLowerCase()) {
		report.error(
			'area',
			'area-contradicts-machine',
			`row ${first.row} puts ${row.machine} in ${first.area}; this row says ${row.area}`,
		);
	}
}

function checkSettled(row: MapRow, context: CheckContext, report: RowReport): void {
	if (row.id == null || context.convert) return;
	const settled = context.settled.get(row.id);
	if (!settled || !row.unit) return;
	if (settled.unit !== row.unit || settled.detector !== (row.detector || 'none')) {
		report.error(
			'unit',
			'unit-of-settled-tag',
			`was ${settled.unit} ${settled.detector}, now ${row.unit} ${row.detector || 'none'}: the tag has readings or limits. Make a new tag, or let the draft convert limits, deadband and ranges`,
		);
	}
}
